"""Keys of access. The secret is shown once and kept as its SHA-256; with 256 random bits no slow hash is needed."""

import hashlib
import hmac
import re
import secrets
from collections.abc import Iterable
from typing import Any

from sqlalchemy import Engine, Row, insert, select, update

from service.domain.kept import KeyRecord, Scope
from service.storage.audit import Action, note
from service.storage.clock import utc_now
from service.storage.engine import reading, writing
from service.storage.errors import NotKept
from service.storage.identifiers import is_key_id, new_key_id
from service.storage.tables import keys
from service.storage.texts import label

NO_KEY = "There is no such key."
PLAIN_KEY = re.compile(r"lw_[0-9A-Za-z_-]{43}")


class KeyStore:
    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(self, owner: str, called: str, scopes: Iterable[Scope]) -> tuple[KeyRecord, str]:
        """A new key, and its plain text: `lw_` and 43 characters, which nobody can find out again.

        Raises
        ------
        WrongValues : the label cannot be used.
        """
        plain = "lw_" + secrets.token_urlsafe(32)
        record = KeyRecord(new_key_id(), owner, label(called), frozenset(scopes), utc_now(), None)
        with writing(self._engine) as connection:
            connection.execute(
                insert(keys).values(
                    key_id=record.key_id,
                    owner=owner,
                    label=record.label,
                    scopes=" ".join(sorted(record.scopes)),
                    secret_sha256=_sha256(plain),
                    created_utc=record.created_utc,
                )
            )
            note(connection, owner, None, Action.KEY_ADDED, record.key_id, {"label": record.label})
        return record, plain

    def find(self, plain: str) -> KeyRecord | None:
        """The key of that plain text; None if it is unknown or revoked."""
        if PLAIN_KEY.fullmatch(plain) is None:
            return None
        hashed = _sha256(plain)
        with reading(self._engine) as connection:
            row = connection.execute(select(keys).where(keys.c.secret_sha256 == hashed)).one_or_none()
        # the index compares hashes, which tell nothing of the secret; what decides takes the same time for all
        if row is None or not hmac.compare_digest(row.secret_sha256, hashed) or row.revoked_utc is not None:
            return None
        return _record(row)

    def revoke(self, key_id: str, *, by: str | None = None) -> KeyRecord:
        """From now on it opens nothing; revoking again changes nothing. Raises NotKept."""
        if not is_key_id(key_id):
            raise NotKept(NO_KEY)
        with writing(self._engine) as connection:
            mine = keys.c.key_id == key_id
            fresh = update(keys).where(mine, keys.c.revoked_utc.is_(None)).values(revoked_utc=utc_now())
            revoked = connection.execute(fresh).rowcount
            row = connection.execute(select(keys).where(mine)).one_or_none()
            if row is None:
                raise NotKept(NO_KEY)
            if revoked:
                note(connection, row.owner, by, Action.KEY_REVOKED, key_id)
            return _record(row)

    def list(self, owner: str | None = None) -> tuple[KeyRecord, ...]:
        """Keys of an owner, or of all, in the order of their making; the revoked ones too."""
        wanted = select(keys).order_by(keys.c.created_utc, keys.c.key_id)
        with reading(self._engine) as connection:
            rows = connection.execute(wanted if owner is None else wanted.where(keys.c.owner == owner))
            return tuple(_record(row) for row in rows)


def _sha256(plain: str) -> str:
    return hashlib.sha256(plain.encode()).hexdigest()


def _record(row: Row[Any]) -> KeyRecord:
    scopes = frozenset(Scope(scope) for scope in row.scopes.split())
    return KeyRecord(row.key_id, row.owner, row.label, scopes, row.created_utc, row.revoked_utc)
