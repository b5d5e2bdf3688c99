"""Stall warnings: spans, hysteresis, hold, and the numbers and words of each."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from service.domain.arrays import FloatArray
from service.domain.codes import Flag, Level
from service.domain.results import StallMargins, StallWarning
from service.domain.settings import Aircraft, Configuration, WarningSettings
from service.reduction.stall_warnings import RELEASE_STEP, stall_warnings

CRAFT = Aircraft(configurations=(Configuration("clean", 11.2), Configuration("flaps", 10.0)))
DEFAULTS = WarningSettings()


def margins_of(margin: FloatArray, step_s: float = 0.1, flags: int = 0) -> StallMargins:
    n = margin.size
    return StallMargins(
        time_s=100.0 + step_s * np.arange(n, dtype=np.float64),
        load_factor=np.full(n, 1.4),
        stall_speed_mps=np.full(n, 13.0),
        margin=margin,
        margin_lower_95=margin - 0.05,
        indicated_margin=margin + 0.069,
        flags=np.full(n, flags, dtype=np.uint32),
        load_factor_source="accelerometer",
    )


def warned(
    margin: FloatArray, step_s: float = 0.1, given: WarningSettings = DEFAULTS, craft: Aircraft = CRAFT, flags: int = 0
) -> tuple[StallMargins, tuple[StallWarning, ...]]:
    return stall_warnings(margins_of(margin, step_s, flags), np.zeros(margin.size, dtype=np.int64), craft, given)


def dip(low: float, first: int, last: int, n: int = 100, high: float = 0.6) -> FloatArray:
    """Margin `high`, but `low` from sample `first` up to `last`, both included."""
    index = np.arange(n)
    return np.where((index >= first) & (index <= last), low, high)


# --- spans ------------------------------------------------------------------------------------------------------------


def test_a_deep_dip_is_a_caution_and_a_warning_with_its_numbers() -> None:
    margin = dip(0.25, 20, 60)
    margin[40:50] = 0.09
    margin[45] = 0.08
    flagged, found = warned(margin)
    caution, warning = found
    assert (caution.level, warning.level) == (Level.CAUTION, Level.WARNING)
    assert (caution.start_s, caution.end_s) == pytest.approx((102.0, 106.0))
    assert (warning.start_s, warning.end_s) == pytest.approx((104.0, 104.9))
    assert warning.minimum_margin == pytest.approx(0.08)
    assert warning.minimum_margin_lower_95 == pytest.approx(0.03)
    assert warning.indicated_margin == pytest.approx(0.149)
    assert warning.load_factor == pytest.approx(1.4)
    assert warning.configuration == "clean"
    assert warning.message == (
        "Warning: margin 8 % (lower 95 % 3 %) at load factor 1.40 in configuration clean; "
        "the uncorrected reading showed 15 %."
    )
    assert np.flatnonzero(flagged.flags & Flag.CAUTION.value).tolist() == list(range(20, 61))
    assert np.flatnonzero(flagged.flags & Flag.WARNING.value).tolist() == list(range(40, 50))


def test_ample_margin_warns_of_nothing() -> None:
    flagged, found = warned(np.full(50, 0.31), flags=int(Flag.EXTRAPOLATED))
    assert found == ()
    assert (flagged.flags == Flag.EXTRAPOLATED).all()


def test_thresholds_are_settable() -> None:
    margin = dip(0.35, 20, 60)
    assert warned(margin)[1] == ()
    found = warned(margin, given=WarningSettings(caution_below=0.4, warning_below=0.36))[1]
    assert [warning.level for warning in found] == [Level.CAUTION, Level.WARNING]


def test_the_configuration_is_that_of_the_worst_instant() -> None:
    margin = dip(0.2, 20, 60)
    margin[50] = 0.15
    in_force = (np.arange(100) >= 45).astype(np.int64)
    found = stall_warnings(margins_of(margin), in_force, CRAFT, DEFAULTS)[1]
    assert [warning.configuration for warning in found] == ["flaps"]


# --- hysteresis and hold ----------------------------------------------------------------------------------------------


def test_a_margin_that_hovers_at_the_threshold_is_one_span() -> None:
    margin = dip(0.29, 20, 79)
    margin[21:79:2] = 0.30 + 0.9 * RELEASE_STEP
    assert len(warned(margin, given=WarningSettings(hold_s=0.0))[1]) == 1


def test_release_needs_the_step_above_the_threshold() -> None:
    margin = dip(0.29, 20, 30)
    margin[31:60] = 0.30 + 0.5 * RELEASE_STEP
    (caution,) = warned(margin)[1]
    assert caution.end_s == pytest.approx(105.9)


def test_what_is_shorter_than_the_hold_is_not_reported() -> None:
    assert warned(dip(0.2, 20, 23))[1] == ()
    assert len(warned(dip(0.2, 20, 24))[1]) == 1  # five samples of 0.1 s
    flagged, _ = warned(dip(0.2, 20, 23))
    assert not flagged.flags.any()


def test_a_recovery_shorter_than_the_hold_is_none() -> None:
    margin = dip(0.2, 20, 60)
    margin[40:44] = 0.6
    assert len(warned(margin)[1]) == 1
    margin[40:46] = 0.6
    assert len(warned(margin)[1]) == 2


def test_one_sample_at_one_hertz_lasts_a_second() -> None:
    (caution,) = warned(dip(0.2, 20, 20), step_s=1.0)[1]
    assert caution.start_s == caution.end_s == 120.0


def test_a_single_sample_without_a_rate_is_reported_only_without_a_hold() -> None:
    assert warned(np.array([0.05]))[1] == ()
    assert len(warned(np.array([0.05]), given=WarningSettings(hold_s=0.0))[1]) == 2


def test_endless_chatter_becomes_fewer_longer_spans_that_miss_nothing() -> None:
    margin = np.where(np.arange(40_000) // 4 % 2 == 0, 0.2, 0.6)
    margin[20_000:] = np.where(np.arange(20_000) // 40 % 2 == 0, 0.2, 0.6)
    flagged, found = warned(margin, step_s=1.0)
    assert 1 <= len(found) <= 1000
    assert (flagged.flags[margin < 0.3] == Flag.CAUTION).all()


# --- unknown margins --------------------------------------------------------------------------------------------------


def test_a_lost_sample_does_not_split_a_span_but_a_long_silence_does() -> None:
    margin = dip(0.2, 20, 60)
    margin[40] = np.nan
    assert len(warned(margin)[1]) == 1
    margin[35:45] = np.nan
    before, after = warned(margin)[1]
    assert (before.end_s, after.start_s) == pytest.approx((103.4, 104.5))


def test_a_held_level_does_not_outlast_a_silence() -> None:
    margin = dip(0.29, 20, 40)
    margin[41:60] = np.nan
    margin[60:] = 0.30 + 0.5 * RELEASE_STEP  # undecided: neither below nor released
    (caution,) = warned(margin)[1]
    assert caution.end_s == pytest.approx(104.0)


@pytest.mark.parametrize("n", [0, 1, 50])
def test_nothing_known_nothing_said(n: int) -> None:
    flagged, found = warned(np.full(n, np.nan), flags=int(Flag.ON_GROUND))
    assert found == ()
    assert (flagged.flags == Flag.ON_GROUND).all()


# --- properties -------------------------------------------------------------------------------------------------------


@settings(deadline=None)
@given(
    margin=arrays(np.float64, st.integers(0, 80), elements=st.floats(-1.0, 1.0) | st.just(float("nan"))),
    hold_s=st.sampled_from([0.0, 0.1, 0.25, 1.0]),
    threshold=st.floats(-0.5, 0.8),
)
def test_rules_that_hold_for_any_flight(margin: FloatArray, hold_s: float, threshold: float) -> None:
    given_settings = WarningSettings(caution_below=threshold, warning_below=-2.0, hold_s=hold_s)
    flagged, found = warned(margin, given=given_settings)
    inside = np.zeros(margin.size, dtype=bool)
    for caution in found:
        span = (flagged.time_s >= caution.start_s) & (flagged.time_s <= caution.end_s)
        inside |= span
        assert caution.minimum_margin == np.nanmin(margin[span]) < threshold
        assert margin[span][0] < threshold
        assert margin[span][-1] < threshold + RELEASE_STEP
    assert all(later.start_s - former.end_s > hold_s for former, later in pairwise(found))
    assert np.array_equal(inside, (flagged.flags & Flag.CAUTION.value) > 0)
    if hold_s == 0.0:
        assert inside[margin < threshold].all()  # without a hold nothing below the threshold goes unreported


@settings(deadline=None)
@given(margin=arrays(np.float64, 60, elements=st.floats(-1.0, 1.0)))
def test_a_warning_always_lies_within_a_caution(margin: FloatArray) -> None:
    flagged, _ = warned(margin)
    caution, warning = (flagged.flags & flag.value > 0 for flag in (Flag.CAUTION, Flag.WARNING))
    assert not (warning & ~caution).any()


# --- words ------------------------------------------------------------------------------------------------------------


def test_the_message_tells_what_the_maximum_bank_would_leave() -> None:
    craft = Aircraft(maximum_bank_deg=60.0, configurations=CRAFT.configurations)
    (caution,) = warned(dip(0.2, 20, 60), craft=craft)[1]
    # from load factor 1.4 to 2: 1.2 sqrt(1.4 / 2) - 1 = 0.004
    assert caution.message.endswith("At this speed and the maximum bank of 60 degrees it is 0 %.")
    gentle = Aircraft(maximum_bank_deg=30.0, configurations=CRAFT.configurations)
    assert "maximum bank" not in warned(dip(0.2, 20, 60), craft=gentle)[1][0].message


def test_what_rounds_to_nothing_has_no_sign() -> None:
    found = warned(dip(-0.001, 20, 60))[1]
    assert "margin 0 % (lower 95 % -5 %)" in found[0].message


def test_the_message_says_when_the_load_factor_is_assumed() -> None:
    (caution,) = warned(dip(0.2, 20, 60), flags=int(Flag.NO_LOAD_FACTOR))[1]
    assert "at load factor 1.40, assumed for the maximum bank, in configuration clean" in caution.message
