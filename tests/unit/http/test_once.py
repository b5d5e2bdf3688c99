"""Idempotency keys: as they are read, and what makes two requests the same."""

import pytest
from flask import Request
from werkzeug.test import EnvironBuilder

from service.domain.errors import WrongValues
from service.http.once import once_of
from service.storage.idempotency import Once


def once(key: str | None, *said: object, path: str = "/v1/flights") -> Once | None:
    headers = {} if key is None else {"Idempotency-Key": key}
    return once_of(Request(EnvironBuilder(path, method="POST", headers=headers).get_environ()), *said)


def test_without_a_key() -> None:
    assert once(None, "hash") is None


@pytest.mark.parametrize(("given", "key"), [("abc", "abc"), ('"abc"', "abc"), (' "a b" ', "a b"), ('"', '"')])
def test_the_key(given: str, key: str) -> None:
    made = once(given)
    assert made is not None
    assert made.key == key


@pytest.mark.parametrize("key", ["", '""', "x" * 256, "naïve"])
def test_no_key(key: str) -> None:
    with pytest.raises(WrongValues):
        once(key)


def test_the_same_request() -> None:
    assert once("k", "hash", {"a": 1, "b": 2.0}, None) == once("k", "hash", {"b": 2.0, "a": 1}, None)


@pytest.mark.parametrize(
    "other", [("hash2", {}, None), ("hash", {"a": 0}, None), ("hash", {}, "kite"), ("hash", None, None)]
)
def test_another_request(other: tuple[object, ...]) -> None:
    first, second = once("k", "hash", {}, None), once("k", *other)
    assert first is not None
    assert second is not None
    assert first.request_hash != second.request_hash


def test_another_call() -> None:
    assert once("k", "hash") != once("k", "hash", path="/v1/flights/x/reductions")
