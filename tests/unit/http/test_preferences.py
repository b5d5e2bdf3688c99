"""`Prefer`: what is understood, and how long a request then waits."""

import pytest
from flask import Response
from werkzeug.test import EnvironBuilder
from werkzeug.wrappers import Request

from service.http.preferences import Preference, preference_of, say_applied


def preference(*headers: str) -> Preference:
    builder = EnvironBuilder(headers=[("Prefer", header) for header in headers])
    return preference_of(Request(builder.get_environ()))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("headers", "expected"),
    [
        ((), Preference()),
        (("respond-async",), Preference(True)),
        (("RESPOND-ASYNC, wait=5",), Preference(True, 5.0)),
        (("wait=5; x=1, respond-async",), Preference(True, 5.0)),
        (("respond-async", "wait=5"), Preference(True, 5.0)),
        (('wait="7"',), Preference(False, 7.0)),
        (("wait = 7",), Preference(False, 7.0)),
        (("wait=7, wait=9",), Preference(False, 7.0)),
        (("wait=soon",), Preference()),
        (("wait=-1",), Preference()),
        (("handling=lenient",), Preference()),
        (("respond-asyncs",), Preference()),
    ],
)
def test_what_is_preferred(headers: tuple[str, ...], expected: Preference) -> None:
    # the environment joins several lines of a header by commas, as a server does
    assert preference(", ".join(headers)) == expected if headers else preference() == expected


@pytest.mark.parametrize(
    ("given", "wait_s"),
    [
        (Preference(), 30.0),
        (Preference(True), 0.0),
        (Preference(True, 5.0), 5.0),
        (Preference(False, 5.0), 5.0),
        (Preference(False, 500.0), 30.0),
        (Preference(True, 0.0), 0.0),
    ],
)
def test_how_long_to_wait(given: Preference, wait_s: float) -> None:
    assert given.wait(30.0) == wait_s


def test_what_was_honoured_is_said() -> None:
    assert say_applied(Response(), Preference(True, 5.0)).headers["Preference-Applied"] == "respond-async, wait=5"
    silent = say_applied(Response(), Preference())
    assert "Preference-Applied" not in silent.headers
    assert silent.headers["Vary"] == "Prefer"
