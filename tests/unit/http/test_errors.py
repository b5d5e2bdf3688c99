"""The table of class -> status holds every class that a client can cause."""

from collections.abc import Iterator

import pytest

from service.domain.errors import InputTooLarge, LoiterwiseError, UnreadableInput, WrongValues
from service.http.errors import KINDS, kind_of
from service.http.failures import HttpFailure, KeyMissing
from service.http.openapi import STATUS_WORDS
from service.keeping import NothingKept
from service.storage.errors import IdempotencyConflict, LogMissing, VersionConflict


def leaves(cls: type[LoiterwiseError]) -> Iterator[type[LoiterwiseError]]:
    for child in cls.__subclasses__():
        yield child
        yield from leaves(child)


def test_every_error_has_its_entry() -> None:
    classes = set(leaves(LoiterwiseError)) - {HttpFailure}
    assert set(KINDS) <= classes
    # an entry of its own, or of what it is a kind of
    assert [cls for cls in classes if not set(cls.__mro__) & set(KINDS)] == []


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (UnreadableInput("x"), 400),
        (WrongValues("x"), 422),
        (InputTooLarge("x"), 413),
        (KeyMissing("x"), 401),
        (LogMissing("x"), 503),
        (VersionConflict("x", 1, 2), 412),
        (IdempotencyConflict("x"), 409),
        (NothingKept("x"), 503),
    ],
)
def test_statuses(error: LoiterwiseError, status: int) -> None:
    assert kind_of(error).status == status


def test_a_subclass_answers_as_its_parent() -> None:
    assert kind_of(type("Special", (KeyMissing,), {})("x")).status == 401


def test_kinds_are_told_apart_and_documented() -> None:
    assert len({kind.type for kind in KINDS.values()}) == len(KINDS)
    assert {kind.status for kind in KINDS.values()} <= set(STATUS_WORDS)
