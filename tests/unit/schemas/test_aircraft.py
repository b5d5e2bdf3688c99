"""Profiles and installations: what is taken, and how a flight's settings lie over them."""

from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import pytest

from schemas.aircraft import dump_aircraft, instant, load_installation, load_profile, over_profile
from service.domain.errors import WrongValues
from service.domain.kept import AircraftRecord

PROFILE = {"aircraft": {"reference_mass_kg": 6.0}, "probe": {"zero_offset_pa": 0.8}}


def test_a_profile_stays_as_it_was_sent() -> None:
    assert load_profile(PROFILE) == PROFILE
    assert load_profile({}) == {}


def test_what_get_gave_can_be_put() -> None:
    now = datetime(2026, 5, 4, tzinfo=UTC)
    shown = dump_aircraft(AircraftRecord("me", "kite", PROFILE, 3, None, now))
    assert shown["version"] == 3
    assert shown["created_utc"] == "2026-05-04T00:00:00Z"
    assert load_profile(shown) == PROFILE


@pytest.mark.parametrize(
    ("document", "pointer"),
    [
        ([], ""),
        (None, ""),
        ({"wings": 2}, "/wings"),
        ({"loiters": []}, "/loiters"),
        ({"aircraft": {"mass_kg": 0}}, "/aircraft/mass_kg"),
        ({"warnings": {"caution_below": 0.1, "warning_below": 0.2}}, "/warnings/warning_below"),
    ],
)
def test_a_wrong_profile(document: Any, pointer: str) -> None:
    with pytest.raises(WrongValues) as caught:
        load_profile(document)
    assert set(caught.value.errors) == {pointer}


def test_settings_over_the_profile() -> None:
    settings = {"aircraft": {"mass_kg": 6.4}, "probe": {"zero_offset_pa": None}, "loiters": []}
    assert over_profile(PROFILE, settings) == {
        "aircraft": {"reference_mass_kg": 6.0, "mass_kg": 6.4},
        "probe": {"zero_offset_pa": None},
        "loiters": [],
    }
    assert PROFILE["aircraft"] == {"reference_mass_kg": 6.0}


def test_what_is_no_object_stands_for_the_schema_to_refuse() -> None:
    assert over_profile(PROFILE, {"aircraft": 7})["aircraft"] == 7


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("2026-05-04T09:12:00Z", datetime(2026, 5, 4, 9, 12, tzinfo=UTC)),
        ("2026-05-04T09:12:00.5+02:00", datetime(2026, 5, 4, 7, 12, 0, 500_000, tzinfo=UTC)),
        # as a query that forgot to quote its plus
        ("2026-05-04T09:12:00 02:00", datetime(2026, 5, 4, 9, 12, tzinfo=timezone(timedelta(hours=2)))),
    ],
)
def test_instants(text: str, expected: datetime) -> None:
    assert instant(text, "/x") == expected


@pytest.mark.parametrize(
    "text", ["", "yesterday", "2026-05-04", "2026-05-04T09:12:00", "0001-01-01T00:00:00+23:00", "2026-13-01T00:00:00Z"]
)
def test_no_instants(text: str) -> None:
    with pytest.raises(WrongValues) as caught:
        load_installation({"from_utc": text})
    assert set(caught.value.errors) == {"/from_utc"}
