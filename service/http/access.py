"""Who may call, and as whom: everyone as the one owner, or holders of keys.

The first key, from the environment, belongs to the owner `first` and may do everything. Further keys are kept in the
database, with an owner and scopes each. While access is open, everyone is the owner `first` too: so what was kept then
is still there once keys are asked for.
"""

import hashlib
import hmac
from dataclasses import dataclass

from flask import Flask, Request, g, request

from service.config import Access, Config
from service.domain.kept import Scope
from service.http.failures import KeyMissing, ScopeMissing
from service.keeping import Keeping

PUBLIC = frozenset({"health.live", "health.ready", "documents.openapi", "documents.docs", "documents.index", "static"})
"""Endpoints that hold nothing of anyone: they answer without a key."""
READING = frozenset({"GET", "HEAD", "OPTIONS"})
FIRST_OWNER = "first"


@dataclass(frozen=True, slots=True)
class Caller:
    """Whose things a request is about, and by which key; None: the first key, or open access."""

    owner: str
    key_id: str | None
    scopes: frozenset[Scope]

    def may(self, scope: Scope) -> bool:
        return scope in self.scopes or Scope.ADMIN in self.scopes


FIRST = Caller(FIRST_OWNER, None, frozenset({Scope.ADMIN}))


def caller() -> Caller:
    """Who calls now."""
    known: Caller = g.caller
    return known


def guard(app: Flask, config: Config, keeping: Keeping) -> None:
    """With `keys`, refuse calls without `Authorization: Bearer <key>`, and those that the key's scopes leave out."""
    expected = None if config.access is Access.OPEN or config.key is None else _digest(config.key)

    @app.before_request
    def check() -> None:
        g.caller = FIRST
        if expected is None or request.endpoint is None or request.endpoint in PUBLIC:
            return
        g.caller = _caller_of(request, expected, keeping)
        needed = Scope.READ if request.method in READING else Scope.WRITE
        if not g.caller.may(needed):
            raise ScopeMissing(f"This call needs a key with the scope `{needed}`.")


def _caller_of(request: Request, expected: bytes, keeping: Keeping) -> Caller:
    scheme, _, given = request.headers.get("Authorization", "").partition(" ")
    plain = given.strip()
    if scheme.lower() == "bearer" and plain:
        if hmac.compare_digest(_digest(plain), expected):
            return FIRST
        if keeping.keeps and (record := keeping.stores().keys.find(plain)) is not None:
            return Caller(record.owner, record.key_id, record.scopes)
    raise KeyMissing(
        "This call needs a known key: `Authorization: Bearer ...`.", {"WWW-Authenticate": 'Bearer realm="loiterwise"'}
    )


def _digest(key: str) -> bytes:
    """Equal lengths, so that the comparison's time tells nothing."""
    return hashlib.sha256(key.encode("utf-8", "replace")).digest()
