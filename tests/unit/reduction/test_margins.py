"""Stall margins: check values of section f, the lower bound against Monte Carlo, silence where nothing is known."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.domain.codes import Flag
from service.domain.results import CorrectedSeries, LoadFactorSeries, StallMargins
from service.domain.settings import Aircraft, Configuration
from service.reduction.margins import level_stall_speeds, lowest_ratio_95, stall_margins
from tests.unit.reduction.constructed import corrected_of, load_factor_of

KNOT = 1852.0 / 3600.0


def aircraft(stall_speed_mps: float = 12.0, uncertainty_mps: float | None = 0.0, **more: Any) -> Aircraft:
    return Aircraft(configurations=(Configuration("clean", stall_speed_mps, uncertainty_mps),), **more)


def margins_of(corrected: CorrectedSeries, load_factor: LoadFactorSeries, craft: Aircraft, **more: Any) -> StallMargins:
    margins, absent = stall_margins(corrected, load_factor, craft, np.zeros(corrected.time_s.size, dtype=int), **more)
    assert margins is not None
    assert absent is None
    return margins


# --- stall speed ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("stall_mps", "load_factor", "reference_kg", "mass_kg", "expected_mps", "tolerance"),
    [
        (50.0 * KNOT, 1.4142136, None, None, 59.460 * KNOT, 1e-5),  # handbook: 50 kt at 45 degrees of bank
        (181.0 * KNOT, 1.0, 5700.0, 4100.0, 153.509 * KNOT, 1e-5),  # examination question on mass
        (12.0, 1.4142136, 6.0, 6.6, 14.9670, 1e-5),  # constructed: 10 % heavier at 45 degrees
        (10.0, 1.0, 1.0, 0.8, 8.9443, 1e-5),
        (10.0, 1.0, 1.0, 1.2, 10.9545, 1e-5),
        (10.0, 2.9238, None, None, 17.099, 1e-4),  # 70 degrees
    ],
)
def test_stall_speeds_of_the_check_values(
    stall_mps: float,
    load_factor: float,
    reference_kg: float | None,
    mass_kg: float | None,
    expected_mps: float,
    tolerance: float,
) -> None:
    craft = aircraft(stall_mps, reference_mass_kg=reference_kg, mass_kg=mass_kg)
    margins = margins_of(corrected_of([expected_mps * 1.25]), load_factor_of([load_factor]), craft)
    assert margins.stall_speed_mps == pytest.approx([expected_mps], rel=tolerance)
    assert margins.margin == pytest.approx([0.25], abs=2 * tolerance)


def test_stall_speed_from_wing_area_and_mass() -> None:
    wing = Configuration("wing", wing_area_m2=0.5, lift_coefficient_max=1.3)
    speeds = level_stall_speeds(Aircraft(reference_mass_kg=5.0, mass_kg=6.0, configurations=(wing,)))
    assert speeds.speed_mps == pytest.approx([np.sqrt(2 * 6.0 * 9.80665 / (1.225 * 0.5 * 1.3))])
    assert speeds.standard_uncertainty_mps / speeds.speed_mps == pytest.approx([np.hypot(0.05, 0.01)])
    at_reference = level_stall_speeds(Aircraft(reference_mass_kg=6.0, configurations=(wing,)))
    assert at_reference.speed_mps == pytest.approx(speeds.speed_mps)


def test_a_given_stall_speed_goes_before_one_from_the_wing() -> None:
    both = Configuration("both", stall_speed_mps=11.0, wing_area_m2=0.5, lift_coefficient_max=1.3)
    assert level_stall_speeds(Aircraft(mass_kg=6.0, configurations=(both,))).speed_mps == pytest.approx([11.0])


def test_uncertainty_of_mass_counts_half() -> None:
    craft = aircraft(12.0, 0.36, reference_mass_kg=6.0, mass_kg=6.0, mass_uncertainty_kg=0.6)
    assert level_stall_speeds(craft).standard_uncertainty_mps == pytest.approx([12.0 * np.hypot(0.03, 0.05)])


def test_an_unstated_uncertainty_is_three_per_cent_not_none() -> None:
    assert level_stall_speeds(aircraft(10.0, None)).standard_uncertainty_mps == pytest.approx([0.3])


def test_each_configuration_has_its_own_stall_speed() -> None:
    craft = Aircraft(configurations=(Configuration("clean", 12.0), Configuration("flaps", 10.0), Configuration("?")))
    margins, _ = stall_margins(corrected_of([15.0] * 3), load_factor_of([1.0] * 3), craft, np.array([0, 1, 2]))
    assert margins is not None
    assert margins.margin[:2] == pytest.approx([0.25, 0.5])
    assert np.isnan(margins.margin[2])
    assert np.isnan(margins.stall_speed_mps[2])


@pytest.mark.parametrize(
    "craft",
    [
        Aircraft(),
        Aircraft(configurations=(Configuration("clean"),)),
        Aircraft(configurations=(Configuration("wing", wing_area_m2=0.5, lift_coefficient_max=1.3),)),
        Aircraft(mass_kg=0.0, configurations=(Configuration("wing", 0.0, wing_area_m2=0.5, lift_coefficient_max=1.3),)),
    ],
)
def test_without_a_stall_speed_there_are_no_margins_but_a_reason(craft: Aircraft) -> None:
    margins, absent = stall_margins(corrected_of([15.0]), load_factor_of([1.0]), craft, np.zeros(1, dtype=int))
    assert margins is None
    assert absent is not None
    assert absent.startswith("No stall margins:")


def test_a_wing_pushed_down_stalls_too_and_a_push_over_is_no_endless_margin() -> None:
    margins = margins_of(corrected_of([12.0] * 3), load_factor_of([-1.0, 0.0, 0.1]), aircraft(12.0))
    assert margins.margin == pytest.approx([0.0, 1 / np.sqrt(0.1) - 1, 1 / np.sqrt(0.1) - 1])
    assert margins.load_factor.tolist() == [-1.0, 0.0, 0.1]


# --- lower bound ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("airspeed_uncertainty", "stall_uncertainty", "load_uncertainty", "mass_uncertainty_kg"),
    [(0.1, 0.3, 0.03, 0.1), (1.5, 0.1, 0.0, 0.01), (0.05, 1.5, 0.0, 0.01), (0.8, 0.6, 0.1, 0.3), (3.0, 1.2, 0.0, 0.1)],
)
def test_one_truth_in_forty_lies_below_the_lower_bound(
    airspeed_uncertainty: float, stall_uncertainty: float, load_uncertainty: float, mass_uncertainty_kg: float
) -> None:
    craft = aircraft(
        11.2, stall_uncertainty, reference_mass_kg=6.0, mass_kg=6.4, mass_uncertainty_kg=mass_uncertainty_kg
    )
    corrected = replace(corrected_of([14.0]), calibrated_standard_uncertainty_mps=np.array([airspeed_uncertainty]))
    margins = margins_of(corrected, load_factor_of([1.4], load_uncertainty), craft)
    rng = np.random.default_rng(11)
    airspeed, stall, load, mass = (
        value + uncertainty * rng.standard_normal(400_000)
        for value, uncertainty in (
            (14.0, airspeed_uncertainty),
            (11.2, stall_uncertainty),
            (1.4, load_uncertainty),
            (6.4, mass_uncertainty_kg),
        )
    )
    truth = airspeed / (stall * np.sqrt(load * mass / 6.0)) - 1.0
    assert np.mean(truth < margins.margin_lower_95[0]) == pytest.approx(0.025, abs=0.002)


def test_a_normal_or_lognormal_law_for_the_ratio_would_not_do() -> None:
    # with airspeed known to 20 % a lognormal bound is too high; with the stall speed known to 20 % a normal one too low
    poor_airspeed = lowest_ratio_95(np.array([14.0]), np.array([1.96 * 2.8]), np.array([11.0]), np.array([0.0]))
    assert poor_airspeed == pytest.approx([14.0 / 11.0 * (1 - 1.96 * 0.2)])
    poor_stall = lowest_ratio_95(np.array([14.0]), np.array([0.0]), np.array([11.0]), np.array([1.96 * 2.2]))
    assert poor_stall == pytest.approx([14.0 / 11.0 / (1 + 1.96 * 0.2)])


@given(
    numerator=st.floats(0.0, 100.0),
    numerator_half=st.floats(0.0, 200.0),
    divisor=st.floats(0.1, 100.0),
    divisor_half=st.floats(0.0, 300.0),
)
def test_the_bound_solves_its_equation_and_never_exceeds_the_ratio(
    numerator: float, numerator_half: float, divisor: float, divisor_half: float
) -> None:
    widths = (np.array([v]) for v in (numerator, numerator_half, divisor, divisor_half))
    ratio = float(lowest_ratio_95(*widths)[0])
    assert 0.0 <= ratio <= numerator / divisor * (1 + 1e-9)
    if numerator > numerator_half:
        left, right = numerator - ratio * divisor, np.hypot(numerator_half, ratio * divisor_half)
        assert left == pytest.approx(right, abs=1e-6 * (numerator + divisor))


def test_the_fits_own_coverage_factor_widens_the_airspeeds_share() -> None:
    corrected, load = corrected_of([14.0]), load_factor_of([1.0])
    narrow = margins_of(corrected, load, aircraft(11.2, 0.0), coverage_factor_95=2.0)
    wide = margins_of(corrected, load, aircraft(11.2, 0.0), coverage_factor_95=4.0)
    assert narrow.margin - narrow.margin_lower_95 == pytest.approx([0.2 / 11.2])
    assert wide.margin - wide.margin_lower_95 == pytest.approx([0.4 / 11.2])


# --- where there is no margin -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("flag", [Flag.ON_GROUND, Flag.UNCALIBRATED, Flag.MISSING, Flag.FAULTY])
def test_silent(flag: Flag) -> None:
    corrected = replace(corrected_of([15.0, 15.0]), flags=np.array([0, flag], dtype=np.uint32))
    margins = margins_of(corrected, load_factor_of([1.0, 1.0]), aircraft())
    for values in (margins.margin, margins.margin_lower_95, margins.indicated_margin):
        assert np.isnan(values).tolist() == [False, True]
    assert margins.flags.tolist() == [0, flag]


@pytest.mark.parametrize("flag", [Flag.EXTRAPOLATED, Flag.STANDARD_STATIC, Flag.BELOW_ZERO])
def test_not_silent(flag: Flag) -> None:
    corrected = replace(corrected_of([15.0]), flags=np.array([flag], dtype=np.uint32))
    assert np.isfinite(margins_of(corrected, load_factor_of([1.0]), aircraft()).margin).all()


def test_an_unknown_load_factor_is_flagged_and_gives_no_margin() -> None:
    margins = margins_of(corrected_of([15.0, 15.0]), load_factor_of([1.0, np.nan]), aircraft())
    assert np.isnan(margins.margin).tolist() == [False, True]
    assert margins.flags.tolist() == [0, Flag.NO_LOAD_FACTOR]


def test_an_assumed_load_factor_is_flagged_and_gives_one() -> None:
    load = replace(load_factor_of([1.4142]), assumed=np.array([True]))
    margins = margins_of(corrected_of([15.0]), load, aircraft())
    assert margins.margin == pytest.approx([15.0 / (12.0 * np.sqrt(1.4142)) - 1.0])
    assert margins.flags.tolist() == [Flag.NO_LOAD_FACTOR]


def test_the_uncorrected_reading_shows_its_own_margin() -> None:
    corrected = replace(corrected_of([12.0]), indicated_mps=np.array([13.8]))
    margins = margins_of(corrected, load_factor_of([1.0]), aircraft())
    assert margins.margin == pytest.approx([0.0])
    assert margins.indicated_margin == pytest.approx([0.15])


@pytest.mark.parametrize("airspeeds", [np.empty(0), np.full(7, np.nan), np.zeros(3)])
def test_hostile_series(airspeeds: np.ndarray) -> None:
    corrected = replace(corrected_of(airspeeds), calibrated_standard_uncertainty_mps=np.zeros(airspeeds.size))
    margins = margins_of(corrected, load_factor_of(np.ones(airspeeds.size)), aircraft())
    assert margins.margin.shape == airspeeds.shape
    assert np.array_equal(margins.margin_lower_95, np.where(np.isnan(airspeeds), np.nan, -1.0), equal_nan=True)
