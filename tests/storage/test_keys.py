"""Keys: shown once, found by nothing but the whole of their text, and not any more when revoked."""

import re

import pytest
from sqlalchemy import Engine, text

from service.domain.errors import WrongValues
from service.domain.kept import Scope
from service.storage.engine import reading
from service.storage.errors import NotKept
from service.storage.keys import KeyStore
from tests.storage.kept_things import OTHER, OWNER


@pytest.fixture
def store(engine: Engine) -> KeyStore:
    return KeyStore(engine)


def test_a_key_is_found_by_its_text(store: KeyStore) -> None:
    record, plain = store.add(OWNER, "the tuner's laptop", [Scope.WRITE, Scope.READ])
    assert re.fullmatch(r"lw_[0-9A-Za-z_-]{43}", plain)
    assert (record.owner, record.label, record.revoked_utc) == (OWNER, "the tuner's laptop", None)
    assert record.scopes == {Scope.READ, Scope.WRITE}
    store.add(OTHER, "another", [Scope.ADMIN])
    assert store.find(plain) == record


def test_nothing_else_finds_a_key(store: KeyStore) -> None:
    _, plain = store.add(OWNER, "a key", [Scope.READ])
    flipped = plain[:-1] + ("A" if plain[-1] != "A" else "B")
    for other in ("", "lw_", plain[:-1], plain + "A", flipped, plain.upper(), f" {plain}", "é" * 46, "a\x00", "\ud800"):
        assert store.find(other) is None


def test_no_two_keys_are_alike(store: KeyStore) -> None:
    made = [store.add(OWNER, "a key", [Scope.READ]) for _ in range(20)]
    assert len({plain for _, plain in made}) == 20
    assert len({record.key_id for record, _ in made}) == 20


def test_the_text_of_a_key_is_nowhere_in_the_database(store: KeyStore, engine: Engine) -> None:
    _, plain = store.add(OWNER, "a key", [Scope.READ])
    with reading(engine) as connection:
        kept = [repr(connection.execute(text(f"SELECT * FROM {table}")).all()) for table in ("keys", "audit")]
    assert all(kept)
    assert not any(plain in rows or plain[3:] in rows for rows in kept)


def test_a_revoked_key_opens_nothing(store: KeyStore) -> None:
    record, plain = store.add(OWNER, "a key", [Scope.READ])
    revoked = store.revoke(record.key_id)
    assert revoked.revoked_utc is not None
    assert store.find(plain) is None
    assert store.revoke(record.key_id) == revoked
    assert store.list(OWNER) == (revoked,)
    for unknown in ("nobody's", "a\x00b", "\ud800"):
        with pytest.raises(NotKept):
            store.revoke(unknown)


def test_keys_are_listed_by_owner(store: KeyStore) -> None:
    first, _ = store.add(OWNER, "first", [Scope.READ])
    second, _ = store.add(OTHER, "second", [Scope.ADMIN])
    third, _ = store.add(OWNER, "third", [Scope.WRITE])
    assert store.list() == (first, second, third)
    assert store.list(OWNER) == (first, third)
    assert store.list("nobody") == ()


def test_a_label_that_cannot_be_used(store: KeyStore) -> None:
    for label in ("", " ", "a\x00b", "l" * 101):
        with pytest.raises(WrongValues):
            store.add(OWNER, label, [Scope.READ])
    assert store.list() == ()
