"""Lists of kept flights: pages, links, filters."""

import hashlib
import re
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from service.domain.kept import NewFlight
from service.http.access import FIRST_OWNER
from tests.contract.conftest import FLIGHTS, KeptClient

COUNT = 500
START = datetime(2026, 5, 4, tzinfo=UTC)


@pytest.fixture(scope="module")
def fleet(kept: KeptClient) -> list[str]:
    """Ids of many flights, an hour after one another, of three aircraft, in the order of adding."""
    ids = []
    for index in range(COUNT):
        new = NewFlight(
            log_sha256=hashlib.sha256(str(index).encode()).hexdigest(),
            log_bytes=index,
            log_media_type="text/csv",
            settings={},
            aircraft=f"kite {index % 3}",
            flown_utc=START + timedelta(hours=index),
        )
        ids.append(kept.stores.flights.add(FIRST_OWNER, new)[0].flight_id)
    return ids


def pages(kept: KeptClient, query: str) -> Iterator[list[dict[str, Any]]]:
    """Items of every page, by the links alone."""
    path: str | None = f"{FLIGHTS}?{query}"
    while path is not None:
        answer = kept.client.get(path)
        assert answer.status_code == 200, answer.text
        document = answer.get_json()
        yield document["items"]
        following = re.search(r'<([^>]*)>; rel="next"', answer.headers["Link"])
        assert (following is None) is (document["next"] is None)
        path = following[1] if following else None


def test_pages_hold_every_flight_once(kept: KeptClient, fleet: list[str]) -> None:
    met = list(pages(kept, "limit=60"))
    assert [len(page) for page in met] == [60] * 8 + [20]
    assert sorted(item["flight"] for page in met for item in page) == sorted(fleet)
    ids = [item["flight"] for page in met for item in page]
    assert ids == sorted(ids, reverse=True)


def test_a_flight_that_comes_meanwhile_moves_nothing(kept: KeptClient, fleet: list[str]) -> None:
    walk = pages(kept, "limit=200")
    seen = [item["flight"] for item in next(walk)]
    late, _ = kept.stores.flights.add(FIRST_OWNER, NewFlight("f" * 64, 1, "text/csv", {}))
    seen += [item["flight"] for page in walk for item in page]
    assert sorted(seen) == sorted(fleet)
    kept.stores.flights.delete(FIRST_OWNER, late.flight_id)


def test_the_cursor_of_the_body_is_that_of_the_link(kept: KeptClient, fleet: list[str]) -> None:
    first = kept.client.get(f"{FLIGHTS}?limit=2").get_json()
    second = kept.client.get(f"{FLIGHTS}?limit=2&cursor={first['next']}").get_json()
    newest = sorted(fleet, reverse=True)
    assert [item["flight"] for item in (*first["items"], *second["items"])] == newest[:4]
    assert first["cautions"]


@pytest.mark.parametrize(
    ("query", "count"),
    [
        ("aircraft=kite%201", 167),
        ("aircraft=nobody", 0),
        ("aircraft=", 0),
        ("state=queued", COUNT),
        ("state=done", 0),
        ("verdict=accepted", 0),
        ("from_utc=2026-05-04T10:00:00Z&to_utc=2026-05-04T12:00:00Z", 3),
        ("from_utc=2026-05-04T12:00:00%2B02:00&to_utc=2026-05-04T12:00:00Z&aircraft=kite%201", 1),
        ("to_utc=2026-05-04T00:00:00Z", 1),
    ],
)
@pytest.mark.usefixtures("fleet")
def test_filters(kept: KeptClient, query: str, count: int) -> None:
    assert sum(len(page) for page in pages(kept, f"{query}&limit=200")) == count


@pytest.mark.parametrize(
    ("query", "pointer"),
    [
        ("verdict=good", "/verdict"),
        ("state=cancelled", "/state"),
        ("from_utc=yesterday", "/from_utc"),
        ("to_utc=2026-05-04", "/to_utc"),
        ("limit=0", "/limit"),
        ("cursor=abc", "/cursor"),
        ("cursor=", "/cursor"),
        ("owner=me", "/owner"),
    ],
)
def test_a_wrong_query(kept: KeptClient, query: str, pointer: str) -> None:
    answer = kept.client.get(f"{FLIGHTS}?{query}")
    assert answer.status_code == 422
    assert set(answer.get_json()["errors"]) == {pointer}
