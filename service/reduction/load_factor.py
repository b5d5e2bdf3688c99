"""Load factor at the probe's times: what the wing carries, in units of the weight.

Sources, best first: the accelerometer; bank, `n = 1/cos(bank)`; the turn, from the GPS velocity. A later one fills only
what the earlier ones leave open, and the `source` says which and how much. Where none has a value the user's maximum
bank stands for the worst case, marked as assumed; without it the load factor is NaN.

Bandwidth of the accelerometer
------------------------------
It is low-passed at 2 Hz without delay. Above lies the structure: wings of small aircraft bend at some 5 to 15 Hz,
propellers shake at 50 to 200 Hz (common practice), and neither changes the angle of attack. Below lies what loads the
wing: pull-ups and the short period, 0.5 to 2 Hz (common practice). Lift itself needs some ten half chords to follow
the angle of attack, about 0.1 s for a 0.3 m chord at 15 m/s, so a spike shorter than that does not stall a wing either.
A half-sine pull-up of 1 s keeps 98 % of its peak, one of 0.5 s 92 %; of a vibration at 10 Hz 4 % remain, above 25 Hz
at most 0.5 %.

References
----------
[1] FAA, Airplane Flying Handbook: load factor of the level coordinated turn.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from service.airdata.constants import STANDARD_GRAVITY_MPS2
from service.airdata.turning_flight import load_factor_from_bank
from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import AttitudeSamples, LoadFactorSamples
from service.domain.results import AirDataSeries, LoadFactorSeries

LOW_PASS_HZ = 2.0
LOW_PASS_WINDOW_S = 0.319 / LOW_PASS_HZ
"""Width of each of the two moving averages whose cascade is down by 3 dB at `LOW_PASS_HZ`."""
ACCELEROMETER_UNCERTAINTY = 0.03
"""Bias, scale and tilt of a small accelerometer in flight (common practice)."""
UNSEEN_ACCELERATION = 0.1
"""Standard uncertainty for the vertical acceleration that bank does not see at all and GPS only when slow: about the
root mean square in light turbulence (own choice)."""
ROLL_UNCERTAINTY_RAD = float(np.radians(3.0))
"""Of an attitude estimate in sustained turns, where the accelerometer misleads it (common practice)."""
STEEPEST_BANK_DEG = 75.0
"""Beyond it (3.9 g) no small aircraft holds a level turn, and bank says nothing about the load."""
ACCELERATION_HALF_WINDOW_S = 0.5
"""Velocity is differenced over twice this: 0.05 m/s of GPS noise become 0.007 g; a turn at 30 deg/s reads 1 % short."""
NEAREST_SAMPLE_S = 0.5
"""A sample farther away than this, and than one and a half of the source's own steps, says nothing."""
PLAUSIBLE_MEDIAN = (0.5, 5.0)
"""Median of a source in flight; outside it the sensor is dead, upside down or written in another unit."""


@dataclass(frozen=True, slots=True)
class _Reading:
    """One source at the probe's times, each (n,); NaN where it is silent."""

    load_factor: FloatArray
    standard_uncertainty: FloatArray


def load_factor_at(
    series: AirDataSeries,
    accelerometer: LoadFactorSamples | None,
    attitude: AttitudeSamples | None,
    maximum_bank_deg: float | None = None,
    gps_delay_s: float = 0.0,
) -> LoadFactorSeries:
    """Load factor at the times of `series`, from the best source at each instant.

    Parameters
    ----------
    series : n samples; its GPS velocities serve where nothing better does.
    accelerometer, attitude : streams at their own rates, NaN in gaps; None or empty when absent.
    maximum_bank_deg : 0 to below 90 [deg]; the worst case where no source has a value.
    gps_delay_s : a GPS velocity stamped t belongs to t - delay. [s]
    """
    time_s = series.time_s
    sources: list[tuple[str, Callable[[], _Reading]]] = []
    if accelerometer is not None:
        text = f"{accelerometer.source}, low-passed at {LOW_PASS_HZ:g} Hz"
        sources.append((text, lambda: _from_accelerometer(time_s, accelerometer)))
    if attitude is not None:
        sources.append(("bank angle, as in a level coordinated turn", lambda: _from_bank(time_s, attitude)))
    sources.append(
        ("turn rate times airspeed, as acceleration of the GPS velocity", lambda: _from_turn(series, gps_delay_s))
    )
    joined, shares = _best_of(sources, ~series.on_ground)
    return _with_worst_case(joined, shares, ~series.on_ground, maximum_bank_deg)


def _best_of(
    sources: list[tuple[str, Callable[[], _Reading]]], airborne: BoolArray
) -> tuple[_Reading, dict[str, float]]:
    """The sources joined, and the share of the flight that each one covers."""
    n = airborne.size
    joined = _Reading(np.full(n, np.nan), np.full(n, np.nan))
    shares: dict[str, float] = {}
    for text, measure in sources:
        missing = airborne & np.isnan(joined.load_factor)
        if shares and not missing.any():
            break
        reading = measure()
        fills = np.isnan(joined.load_factor) & np.isfinite(reading.load_factor)
        if not fills.any() or not _plausible(reading.load_factor, airborne):
            continue
        joined.load_factor[fills] = reading.load_factor[fills]
        joined.standard_uncertainty[fills] = reading.standard_uncertainty[fills]
        shares[text] = float(np.mean(fills[airborne])) if airborne.any() else float(np.mean(fills))
    return joined, shares


def _plausible(load_factor: FloatArray, airborne: BoolArray) -> bool:
    flown = load_factor[airborne & np.isfinite(load_factor)]
    return not flown.size or bool(PLAUSIBLE_MEDIAN[0] <= np.median(flown) <= PLAUSIBLE_MEDIAN[1])


def _with_worst_case(
    joined: _Reading, shares: dict[str, float], airborne: BoolArray, maximum_bank_deg: float | None
) -> LoadFactorSeries:
    unknown = np.isnan(joined.load_factor)
    assumed = unknown & airborne
    if maximum_bank_deg is None or not 0.0 <= maximum_bank_deg < 90.0:
        assumed = np.zeros_like(unknown)
    elif assumed.any():
        joined.load_factor[assumed] = load_factor_from_bank(maximum_bank_deg)
        joined.standard_uncertainty[assumed] = UNSEEN_ACCELERATION
        shares[f"assumed at the maximum bank of {maximum_bank_deg:g} deg"] = float(np.mean(assumed[airborne]))
    return LoadFactorSeries(joined.load_factor, joined.standard_uncertainty, assumed, _source_text(shares))


def _source_text(shares: dict[str, float]) -> str:
    if not shares:
        return "none"
    if len(shares) == 1:
        return next(iter(shares))
    return "; ".join(f"{text} ({100.0 * share:.0f} % of the flight)" for text, share in shares.items())


def _from_accelerometer(time_s: FloatArray, samples: LoadFactorSamples) -> _Reading:
    known = np.isfinite(samples.load_factor)
    at_s, raw = samples.time_s[known], samples.load_factor[known]
    if at_s.size < 2:
        return _near(time_s, at_s, raw, np.full(raw.size, ACCELEROMETER_UNCERTAINTY))
    once = _moving_average(at_s, at_s, raw)
    smoothed = _moving_average(time_s, at_s, once)
    uncertainty = np.hypot(ACCELEROMETER_UNCERTAINTY, _noise_left(at_s, raw - once))
    near = _is_near(time_s, at_s)
    return _Reading(np.where(near, smoothed, np.nan), np.where(near, uncertainty, np.nan))


def _noise_left(time_s: FloatArray, removed: FloatArray) -> float:
    """Noise that passes the filter, from what it removed, taken for white: the part of its power below the edge."""
    step_s = float(np.median(np.diff(time_s)))
    # a triangle of base 2w averages 1.5 w / step independent samples
    averaged = max(1.5 * LOW_PASS_WINDOW_S / step_s, 1.0)
    return float(1.4826 * np.median(np.abs(removed)) / np.sqrt(averaged))


def _moving_average(at_s: FloatArray, time_s: FloatArray, values: FloatArray) -> FloatArray:
    """Mean of the linear interpolant of `values` over the window about each of `at_s`: any rates, no delay."""
    integral = _integral(time_s, values)
    half = LOW_PASS_WINDOW_S / 2
    low = np.clip(at_s - half, time_s[0], time_s[-1])
    high = np.clip(at_s + half, time_s[0], time_s[-1])
    width = high - low
    mean = (integral(high) - integral(low)) / np.where(width > 0.0, width, 1.0)
    # beyond either end hardly any window is left
    return np.where(width > 1e-3 * LOW_PASS_WINDOW_S, mean, np.interp(at_s, time_s, values))


def _integral(time_s: FloatArray, values: FloatArray) -> Callable[[FloatArray], FloatArray]:
    """Integral of the linear interpolant from `time_s[0]` to any time within the samples."""
    steps = np.diff(time_s)
    whole = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * steps)])
    half_slope = 0.5 * np.diff(values) / steps

    def until(end_s: FloatArray) -> FloatArray:
        index = np.clip(np.searchsorted(time_s, end_s, side="right") - 1, 0, steps.size - 1)
        along = end_s - time_s[index]
        integral: FloatArray = whole[index] + along * (values[index] + half_slope[index] * along)
        return integral

    return until


def _from_bank(time_s: FloatArray, attitude: AttitudeSamples) -> _Reading:
    load_factor = load_factor_from_bank(
        np.where(np.abs(attitude.roll_deg) <= STEEPEST_BANK_DEG, attitude.roll_deg, np.nan)
    )
    known = np.isfinite(load_factor)
    at_s, load_factor = attitude.time_s[known], load_factor[known]
    # d(1/cos)/d(bank) = n tan(bank), tan = sqrt(n^2 - 1)
    from_roll = load_factor * np.sqrt(np.maximum(load_factor**2 - 1.0, 0.0)) * ROLL_UNCERTAINTY_RAD
    return _near(time_s, at_s, load_factor, np.hypot(from_roll, UNSEEN_ACCELERATION))


def _from_turn(series: AirDataSeries, gps_delay_s: float) -> _Reading:
    """Length of (acceleration - gravity) over g. In a steady turn the horizontal part is turn rate times true airspeed,
    whatever the wind; vertical acceleration counts where the source has a vertical velocity."""
    velocity = np.stack([series.velocity_north_mps, series.velocity_east_mps, series.velocity_down_mps])
    known = np.isfinite(velocity).all(axis=0)
    at_s, velocity = series.gps_time_s[known], velocity[:, known]
    if at_s.size < 2:
        return _near(series.time_s, np.empty(0), np.empty(0), np.empty(0))
    north, east, down = (_acceleration(at_s, component) / STANDARD_GRAVITY_MPS2 for component in velocity)
    load_factor = np.sqrt(north**2 + east**2 + (1.0 - down) ** 2)
    return _near(series.time_s, at_s - gps_delay_s, load_factor, np.full(at_s.size, UNSEEN_ACCELERATION))


def _acceleration(time_s: FloatArray, velocity_mps: FloatArray) -> FloatArray:
    half = max(ACCELERATION_HALF_WINDOW_S, float(np.median(np.diff(time_s))))
    low, high = np.maximum(time_s - half, time_s[0]), np.minimum(time_s + half, time_s[-1])
    change = np.interp(high, time_s, velocity_mps) - np.interp(low, time_s, velocity_mps)
    acceleration: FloatArray = change / np.maximum(high - low, 1e-9)
    return acceleration


def _near(time_s: FloatArray, at_s: FloatArray, load_factor: FloatArray, uncertainty: FloatArray) -> _Reading:
    """Linear between the samples, NaN where none is near."""
    if not at_s.size:
        return _Reading(np.full(time_s.size, np.nan), np.full(time_s.size, np.nan))
    near = _is_near(time_s, at_s)
    return _Reading(
        np.where(near, np.interp(time_s, at_s, load_factor), np.nan),
        np.where(near, np.interp(time_s, at_s, uncertainty), np.nan),
    )


def _is_near(time_s: FloatArray, at_s: FloatArray) -> BoolArray:
    step_s = float(np.median(np.diff(at_s))) if at_s.size > 1 else 0.0
    reach_s = max(NEAREST_SAMPLE_S, 1.5 * step_s)
    after = np.searchsorted(at_s, time_s)
    to_next = at_s[np.minimum(after, at_s.size - 1)] - time_s
    to_last = time_s - at_s[np.maximum(after - 1, 0)]
    return np.minimum(np.abs(to_next), np.abs(to_last)) <= reach_s
