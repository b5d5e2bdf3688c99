"""Pages: the limit as it is read, the links as they are written."""

import pytest
from flask import Request, Response
from werkzeug.test import EnvironBuilder

from service.domain.errors import WrongValues
from service.http.listing import limit_of, linked


def request(query: str = "") -> Request:
    return Request(EnvironBuilder("/v1/flights", query_string=query).get_environ())


@pytest.mark.parametrize(("query", "limit"), [("", 50), ("limit=1", 1), ("limit=200", 200), ("limit=007", 7)])
def test_the_limit(query: str, limit: int) -> None:
    assert limit_of(request(query)) == limit


@pytest.mark.parametrize("text", ["0", "201", "-1", "1.5", "", "many", "%D9%A3", "9" * 5000])
def test_no_limit(text: str) -> None:
    with pytest.raises(WrongValues) as caught:
        limit_of(request(f"limit={text}"))
    assert set(caught.value.errors) == {"/limit"}


def test_links_keep_the_filters() -> None:
    links = linked(Response(), request("aircraft=a%26b&cursor=old&limit=2"), "n/w").headers["Link"]
    first, following = links.split(", ")
    assert first == '</v1/flights?aircraft=a%26b&limit=2>; rel="first"'
    assert following == '</v1/flights?aircraft=a%26b&limit=2&cursor=n%2Fw>; rel="next"'


def test_the_last_page_has_no_next() -> None:
    assert linked(Response(), request(), None).headers["Link"] == '</v1/flights>; rel="first"'
