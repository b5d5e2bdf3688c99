"""Conditional requests: which version may be replaced, and when an answer is already known."""

import pytest
from flask import Request, Response
from werkzeug.test import EnvironBuilder

from service.http.conditions import expected_version, require_version, revalidated, tagged
from service.http.failures import MissingPrecondition, PreconditionFailed


def request(**headers: str) -> Request:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return Request(EnvironBuilder(headers=named).get_environ())


@pytest.mark.parametrize(
    ("headers", "current", "expected"),
    [
        ({}, 3, None),
        ({}, None, None),
        ({"If_Match": '"3"'}, 3, 3),
        ({"If_Match": '"2", "3"'}, 3, 3),
        ({"If_Match": "*"}, 3, 3),
        ({"If_None_Match": "*"}, None, 0),
        ({"If_None_Match": '"2"'}, 3, 3),
    ],
)
def test_the_version_expected(headers: dict[str, str], current: int | None, expected: int | None) -> None:
    assert expected_version(request(**headers), current) == expected


@pytest.mark.parametrize(
    ("headers", "current"),
    [
        ({"If_Match": '"2"'}, 3),
        ({"If_Match": "3"}, 30),
        ({"If_Match": 'W/"3"'}, 3),
        ({"If_Match": "*"}, None),
        ({"If_Match": '"1"'}, None),
        ({"If_Match": ""}, 3),
        ({"If_None_Match": "*"}, 3),
        ({"If_None_Match": 'W/"3"'}, 3),
    ],
)
def test_a_condition_that_fails(headers: dict[str, str], current: int | None) -> None:
    with pytest.raises(PreconditionFailed):
        expected_version(request(**headers), current)


def test_what_exists_is_not_changed_blindly() -> None:
    with pytest.raises(MissingPrecondition):
        require_version(None, 3)
    assert require_version(None, None) == 0
    assert require_version(3, 3) == 3


def test_an_answer_that_the_client_has() -> None:
    answer = revalidated(Response("content"), request())
    tag = answer.headers["ETag"]
    again = revalidated(Response("content"), request(If_None_Match=f"W/{tag}"))
    assert (again.status_code, again.data, again.headers["ETag"]) == (304, b"", tag)
    assert revalidated(Response("other content"), request(If_None_Match=tag)).status_code == 200


def test_a_version_is_its_tag() -> None:
    assert tagged(Response(), 7).headers["ETag"] == '"7"'
    assert revalidated(tagged(Response("x"), 7), request(If_None_Match='"7"')).status_code == 304
