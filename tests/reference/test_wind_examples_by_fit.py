"""Worked examples of airspeed and wind by GPS, flown leg by leg and solved by the fit itself.

The examples hold the airspeed alike on all legs and do not know it: so the probe reads one and the same pressure on all
legs, from which only the pressure scale that the fit finds leads to the example's airspeed.
"""

import numpy as np
import pytest

from service.airdata.wind_triangle import (
    components_from_direction,
    direction_from_components,
    ground_velocity_from_heading,
    wind_components_from_direction,
)
from service.domain.arrays import FloatArray
from service.domain.codes import Reason, Verdict
from service.domain.results import FitResult, Reduction
from tests.reference.legs import KNOT_MPS, Leg, fit_legs, leg_on_track, log_of_legs, reduce_legs, standard_reading
from tests.reference.printed import agrees

GRAY = ((140.0, 192.0), (112.0, 283.0), (120.0, 20.0))
"""D. Gray, "Using GPS to accurately establish TAS", June 1998, sample as quoted: ground speed in knots on tracks."""
FOUR_LEGS = ((178.0, 178.0), (185.0, 82.0), (188.0, 355.0), (184.0, 265.0))
"""Sample set of a flight-test school, as quoted."""
SANCHEZ = ((76.5, 0.0), (87.9, 120.0), (128.7, 240.0))
"""P. K. Sanchez, newsgroup post of 11 September 2004: airspeed 100, wind 30 from 045."""
HEADING_EXAMPLES = [
    # (airspeed, wind, from, headings, printed ground speeds, tolerance of airspeed and wind)
    # constructed, closed form
    (105.0, 18.0, 250.0, (40, 160, 280), (120.923844, 106.531685, 89.863363)),
    (20.0, 6.0, 315.0, (0, 120, 240), (16.318529, 25.842256, 19.336066)),
    (100.0, 20.0, 270.0, (0, 90, 180), (101.980390, 120.0, 101.980390)),
    (22.0, 7.0, 200.0, (0, 90, 180), (28.677959, 25.265435, 15.606879)),
    (105.0, 18.0, 250.0, (0, 90, 180), (112.435920, 122.069808, 100.280426)),
    # Kitplanes, "Finding TAS from GPS Data", at full precision
    (100.0, 20.0, 270.0, (0, 90, 180, 270), (101.9804, 120.0, 101.9804, 80.0)),
]
TRACK_EXAMPLES = [
    # constructed, closed form: tracks north, east, south, west
    (100.0, 20.0, 270.0, (97.979590, 120.0, 97.979590, 80.0)),
    (100.0, 20.0, 240.0, (108.488578, 116.819252, 88.488578, 82.178236)),
    (20.0, 5.0, 300.0, (17.025624, 24.173262, 22.025624, 15.513008)),
]


def _fit(legs: tuple[tuple[float, float], ...], unit_mps: float = KNOT_MPS) -> FitResult:
    """Ground speeds on tracks; the reading is that of some airspeed near, which only sets the scale to be found."""
    mean = float(np.mean([speed for speed, _ in legs])) * unit_mps
    reading = standard_reading(mean, 0.0)
    return fit_legs(log_of_legs([leg_on_track(v * unit_mps, track, reading) for v, track in legs], wander_share=0.0))


def _airspeed(fit: FitResult, unit_mps: float = KNOT_MPS) -> float:
    (speed,) = fit.true_airspeed_by_loiter_mps
    return speed / unit_mps


def _wind(fit: FitResult | Reduction, unit_mps: float = KNOT_MPS) -> tuple[float, float]:
    """Speed and direction it comes from."""
    wind = fit.wind
    assert wind is not None
    assert wind.from_deg is not None
    return wind.speed_mps.value / unit_mps, wind.from_deg.value


def _headings(legs: tuple[tuple[float, float], ...], fit: FitResult) -> FloatArray:
    north, east = components_from_direction([v * KNOT_MPS for v, _ in legs], [track for _, track in legs])
    return direction_from_components(north - fit.wind.north_mps.value, east - fit.wind.east_mps.value)


def test_three_legs_of_gray() -> None:
    # printed: airspeed 130, headings 200, 287.8, 11.7, wind 20.6 from 314.8; at full precision as below
    fit = _fit(GRAY)
    speed, from_deg = _wind(fit)
    assert agrees(_airspeed(fit), "130")
    assert agrees(speed, "20.6")
    assert agrees(from_deg, "314.8")
    assert agrees(_airspeed(fit), "129.9985")
    assert agrees(speed, "20.6334")
    assert agrees(from_deg, "314.758")
    assert [agrees(h, f) for h, f in zip(_headings(GRAY, fit), ("199.67", "287.79", "11.71"), strict=True)] == [
        True
    ] * 3


def test_three_legs_of_sanchez() -> None:
    # printed: headings 12.2, 103.2, 244.5; the vector method on the rounded ground speeds 99.9932, 30.0228 from 45.054
    fit = _fit(SANCHEZ)
    speed, from_deg = _wind(fit)
    assert agrees(_airspeed(fit), "99.9932")
    assert agrees(speed, "30.0228")
    assert agrees(from_deg, "45.054")
    # the rounding of the ground speeds leaves 0.05 degrees in the headings
    assert _headings(SANCHEZ, fit) == pytest.approx([12.2, 103.2, 244.5], abs=0.1)


def test_four_legs_that_disagree() -> None:
    # printed 183.73 (mean of the four sub-sets, standard deviation 0.83); least squares of all four 183.7219, rms
    # 0.7151, wind 5.0070 from 179.457. The fit lets the wind drift and gust from leg to leg, the example does not.
    fit = _fit(FOUR_LEGS)
    assert _airspeed(fit) == pytest.approx(183.73, abs=0.02)
    speed, from_deg = _wind(fit)
    assert speed == pytest.approx(5.007, abs=0.4)
    assert from_deg == pytest.approx(179.457, abs=5.0)
    assert fit.residual_rms_mps / KNOT_MPS == pytest.approx(0.7151, abs=0.15)


def test_the_shortcut_by_root_mean_square_is_not_what_is_found() -> None:
    # P. K. Sanchez, 2004: the root mean square of ground speeds reads 0.237 % high
    assert _airspeed(_fit(SANCHEZ)) < 100.05


@pytest.mark.parametrize(("airspeed", "wind_speed", "wind_from", "headings", "ground_speeds"), HEADING_EXAMPLES)
def test_legs_on_headings(
    airspeed: float,
    wind_speed: float,
    wind_from: float,
    headings: tuple[float, ...],
    ground_speeds: tuple[float, ...],
) -> None:
    # the example gives ground speeds on headings; the tracks follow from its own wind triangle
    wind = wind_components_from_direction(wind_speed, wind_from)
    tracks = direction_from_components(*ground_velocity_from_heading(headings, airspeed, *wind))
    fit = _fit(tuple(zip(ground_speeds, tracks.tolist(), strict=True)))
    speed, from_deg = _wind(fit)
    assert _airspeed(fit) == pytest.approx(airspeed, abs=2e-4)
    assert speed == pytest.approx(wind_speed, abs=2e-4)
    assert from_deg == pytest.approx(wind_from, abs=1e-3)


@pytest.mark.parametrize(("airspeed", "wind_speed", "wind_from", "ground_speeds"), TRACK_EXAMPLES)
def test_box_on_tracks(airspeed: float, wind_speed: float, wind_from: float, ground_speeds: tuple[float, ...]) -> None:
    fit = _fit(tuple(zip(ground_speeds, (0.0, 90.0, 180.0, 270.0), strict=True)))
    speed, from_deg = _wind(fit)
    assert _airspeed(fit) == pytest.approx(airspeed, abs=1e-5)
    assert speed == pytest.approx(wind_speed, abs=1e-5)
    assert from_deg == pytest.approx(wind_from, abs=1e-4)


def test_speeds_rounded_to_a_tenth_move_the_answer_as_the_example_says() -> None:
    # constructed, headings 40, 160, 280 known: ground speeds rounded to 0.1 give 104.9963 and 17.9667 by speeds alone.
    # With the tracks given as well the answer lies within the rounding of the example.
    wind = wind_components_from_direction(18.0, 250.0)
    tracks = direction_from_components(*ground_velocity_from_heading((40, 160, 280), 105.0, *wind))
    fit = _fit(tuple(zip((120.9, 106.5, 89.9), tracks.tolist(), strict=True)))
    assert _airspeed(fit) == pytest.approx(105.0, abs=0.05)
    assert _wind(fit)[0] == pytest.approx(18.0, abs=0.06)


# --- through the whole service ----------------------------------------------------------------------------------------


def _reduced(legs: tuple[tuple[float, float], ...], airspeed_mps: float, scale: float) -> Reduction:
    reading = standard_reading(airspeed_mps, 0.0, scale)
    return reduce_legs([leg_on_track(speed * KNOT_MPS, track, reading) for speed, track in legs])


@pytest.mark.parametrize("legs", [GRAY, SANCHEZ], ids=["gray", "sanchez"])
def test_headings_of_less_than_230_degrees_are_refused(legs: tuple[tuple[float, float], ...]) -> None:
    # 172 and 219 degrees: solved exactly above, but the contract asks for 230
    answer = _reduced(legs, 60.0, 1.0)
    assert answer.calibration.verdict is Verdict.REFUSED
    assert [reason.code for reason in answer.calibration.reasons] == [Reason.HEADING_COVERAGE]
    assert answer.wind is None


@pytest.mark.parametrize("scale", [0.9, 1.2])
def test_four_legs_through_the_service(scale: float) -> None:
    answer = _reduced(FOUR_LEGS, 183.7219 * KNOT_MPS, scale)
    assert answer.calibration.pressure_scale is not None
    assert answer.calibration.pressure_scale.value == pytest.approx(scale, rel=3e-4)
    assert answer.airspeed is not None
    assert np.mean(answer.airspeed.true_mps) / KNOT_MPS == pytest.approx(183.73, abs=0.03)
    assert _wind(answer)[0] == pytest.approx(5.007, abs=0.4)


@pytest.mark.parametrize(
    ("airspeed", "wind_speed", "wind_from", "headings"),
    [
        (105.0, 18.0, 250.0, (40, 160, 280)),
        (40.0, 12.0, 315.0, (0, 120, 240)),
        (100.0, 20.0, 270.0, (0, 90, 180, 270)),
    ],
)
def test_legs_on_headings_through_the_service(
    airspeed: float, wind_speed: float, wind_from: float, headings: tuple[float, ...]
) -> None:
    wind = wind_components_from_direction(wind_speed * KNOT_MPS, wind_from)
    north, east = ground_velocity_from_heading(headings, airspeed * KNOT_MPS, *wind)
    reading = standard_reading(airspeed * KNOT_MPS, 0.0, 1.18)
    answer = reduce_legs([Leg(n, e, reading) for n, e in zip(north.tolist(), east.tolist(), strict=True)])
    calibration = answer.calibration
    assert calibration.verdict is not Verdict.REFUSED
    assert calibration.pressure_scale is not None
    assert calibration.pressure_scale.value == pytest.approx(1.18, rel=5e-4)
    assert answer.airspeed is not None
    assert np.mean(answer.airspeed.true_mps) / KNOT_MPS == pytest.approx(airspeed, rel=3e-4)
    speed, from_deg = _wind(answer)
    # a GPS that may be late by some tenths of a second blurs the corners: a few mm/s
    assert speed == pytest.approx(wind_speed, abs=0.02)
    assert from_deg == pytest.approx(wind_from, abs=0.1)
