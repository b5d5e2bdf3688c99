"""Who may call: everyone, or holders of the key."""

import hashlib
import hmac

from flask import Flask, request

from service.config import Access, Config
from service.http.failures import KeyMissing

PUBLIC = frozenset({"health.live", "health.ready", "documents.openapi", "documents.docs", "documents.index", "static"})
"""Endpoints that hold nothing of anyone: they answer without a key."""


def guard(app: Flask, config: Config) -> None:
    """With `keys`, refuse calls without `Authorization: Bearer <key>`; with `open`, nothing."""
    if config.access is Access.OPEN or config.key is None:
        return
    expected = _digest(config.key)

    @app.before_request
    def check() -> None:
        if request.endpoint is None or request.endpoint in PUBLIC:
            return
        scheme, _, given = request.headers.get("Authorization", "").partition(" ")
        if scheme.lower() != "bearer" or not hmac.compare_digest(_digest(given.strip()), expected):
            raise KeyMissing(
                "This call needs a known key: `Authorization: Bearer ...`.",
                {"WWW-Authenticate": 'Bearer realm="loiterwise"'},
            )


def _digest(key: str) -> bytes:
    """Equal lengths, so that the comparison's time tells nothing."""
    return hashlib.sha256(key.encode("utf-8", "replace")).digest()
