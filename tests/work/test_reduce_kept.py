"""What is kept of a reduction: the answer of the one-shot call, its series, the numbers for the pool."""

import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from service.app import create_app
from service.config import Config
from service.domain.errors import WrongValues
from service.domain.results import Reduction
from service.intake import reduce_file
from service.storage.aircraft import AircraftStore
from service.storage.series_store import SeriesAbsent, SeriesPart, SeriesStore
from service.version import METHOD
from service.work.order import Order, order_of
from service.work.reduce_kept import answer_from, reduce_kept
from service.work.settings import WorkSettings
from tests import made
from tests.storage.conftest import SQLITE
from tests.work.workshop import OWNER, Workshop


@pytest.fixture
def database() -> str:
    return SQLITE


AIRCRAFT = {"configurations": [{"name": "clean", "stall_speed_mps": 11.2, "stall_speed_uncertainty_mps": 0.3}]}
SETTINGS = {"aircraft": AIRCRAFT, "probe": {"zero_offset_pa": 0.8, "zero_offset_uncertainty_pa": 0.5}}
"""Enough for stall margins."""


@pytest.fixture
def settings(settings: WorkSettings) -> WorkSettings:
    return replace(settings, reducer="service.intake.reduce_file")


def nothing(_share: float) -> None:
    pass


def batch(**settings: Any) -> bytes:
    return json.dumps(made.batch() | ({"settings": settings} if settings else {})).encode()


def order_for(workshop: Workshop, log: bytes, **also: Any) -> Order:
    workshop.add_log(log, **also)
    return order_of(workshop.claim(), workshop.settings)


def test_the_summary_is_what_the_one_shot_call_answers(workshop: Workshop, tmp_path: Path) -> None:
    shares: list[float] = []
    answer = reduce_kept(order_for(workshop, batch(), settings=SETTINGS), shares.append)
    client = create_app(Config(data=tmp_path / "server")).test_client()
    sent = client.post("/v1/reductions?include=faults", data=batch(**SETTINGS), content_type="application/json").json
    # the log's bytes differ, for these settings stand in it
    assert {**sent, "inputs": {**sent["inputs"], "sha256": answer.summary["inputs"]["sha256"]}} == answer.summary
    assert answer.summary["stall_warnings"] or answer.summary["stall_margins_absent"] is None
    assert (answer.verdict, answer.method) == (sent["calibration"]["verdict"], METHOD)
    assert answer.flown_utc is not None
    assert answer.flown_utc.isoformat() == "2026-05-04T09:12:00+00:00"
    assert shares == sorted(shares)
    assert shares[-1] == 1.0


def test_the_series_are_kept_beside_it(workshop: Workshop, tmp_path: Path) -> None:
    log = batch()
    answer = reduce_kept(order_for(workshop, log, settings=SETTINGS), nothing)
    path = tmp_path / "log"
    path.write_bytes(log)
    wanted = reduce_file(path, sha256="0" * 64, settings=SETTINGS)
    kept = SeriesStore(workshop.blobs)
    for group in ("airspeed", "stall_margins"):
        part = kept.read(answer.series_key, group)  # type: ignore[arg-type]
        assert isinstance(part, SeriesPart)
        series = getattr(wanted, group)
        for name, column in part.columns.items():
            np.testing.assert_allclose(column, getattr(series, name), atol=1e-6)
        np.testing.assert_array_equal(part.flags, series.flags)
    assert list(Path(workshop.settings.spool).iterdir()) == []


def test_a_flight_without_margins_says_why(workshop: Workshop) -> None:
    answer = reduce_kept(order_for(workshop, batch()), nothing)
    absent = SeriesStore(workshop.blobs).read(answer.series_key, "stall_margins")
    assert isinstance(absent, SeriesAbsent)
    assert absent.reason == answer.summary["stall_margins_absent"]


def test_settings_of_the_flight_are_put_over_the_profile(workshop: Workshop, monkeypatch: pytest.MonkeyPatch) -> None:
    """Objects field by field, lists whole, and null in place of a value."""
    given: list[Any] = []

    def reducer(_path: Path, *, settings: object, **_also: object) -> Reduction:
        given.append(settings)
        return made.reduction()

    monkeypatch.setattr("service.intake.reduce_file", reducer)
    profile = {
        "aircraft": AIRCRAFT | {"mass_kg": 6.4, "reference_mass_kg": 6.0},
        "probe": {"zero_offset_pa": 0.8, "full_scale_pa": 6900},
        "warnings": {"hold_s": 0.5},
    }
    AircraftStore(workshop.engine).put(OWNER, "kite", profile)
    other = [{"name": "flaps", "stall_speed_mps": 9.9}]
    asked = {"aircraft": {"configurations": other, "mass_kg": 7.0}, "probe": {"zero_offset_pa": None}, "loiters": []}
    reduce_kept(order_for(workshop, batch(), settings=asked, aircraft="kite"), nothing)
    assert given == [
        {
            "aircraft": {"configurations": other, "mass_kg": 7.0, "reference_mass_kg": 6.0},
            "probe": {"zero_offset_pa": None, "full_scale_pa": 6900},
            "warnings": {"hold_s": 0.5},
            "loiters": [],
        }
    ]


def test_settings_that_do_not_fit_the_profile(workshop: Workshop) -> None:
    with pytest.raises(WrongValues) as caught:
        reduce_kept(order_for(workshop, batch(), settings={"warnings": {"caution_below": 0.05}}), nothing)
    assert "/settings/warnings/warning_below" in caught.value.errors


def test_the_number_for_the_pool_is_that_of_the_factor_to_load() -> None:
    """A flight recorded with a factor of 0.95 loaded: what is pooled includes it."""
    reduction = made.reduction()
    loaded = made.estimate(0.94 * 0.95, 0.01 * 0.95)
    answer = answer_from(
        replace(reduction, calibration=replace(reduction.calibration, total_speed_scale=loaded)), "series/a/1"
    )
    assert answer.log_speed_scale == pytest.approx(math.log(0.94) + math.log(0.95))
    # the relative uncertainty is not changed by a known factor
    assert answer.log_speed_scale_uncertainty == pytest.approx(0.01 / 0.94)


def test_a_refused_flight_has_no_number_for_the_pool() -> None:
    answer = answer_from(made.refused_reduction(), "series/a/1")
    assert (answer.verdict, answer.log_speed_scale, answer.log_speed_scale_uncertainty) == ("refused", None, None)
