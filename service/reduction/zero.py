"""Zero offset of the probe before the fit: given, read at rest on the ground, or a prior.

Wind on the ground blows into the probe, always one way, so a reading at rest is too high. The wind found aloft, carried
down by a logarithmic profile, and the heading at rest foretell by how much; the reading's own unrest bounds it, because
wind near the ground is gusty.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3
from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import ZeroOffsetSource
from service.domain.log import AttitudeSamples
from service.domain.results import AirDataSeries, ZeroOffset
from service.domain.settings import ProbeSettings
from service.domain.spans import runs

COMPENSATED_PRIOR_PA = 1.0
"""A probe whose zero was taken before flight (method notes: N(0, 1 Pa))."""
RAW_PRIOR_PA = (90.0, 30.0 / 3.0**0.5)
"""Value and standard uncertainty of a raw sensor's zero: anything from 60 to 120 Pa (method notes)."""
UNKNOWN_PRIOR_PA = 150.0
"""Beyond the largest raw zero seen."""
GIVEN_PA = 0.5
"""Uncertainty of a given zero offset that says none."""
FEWEST_SAMPLES = 3
READING_FLOOR_PA = 0.1
"""Slow drift of the sensor that the scatter at rest does not show."""
PROBE_HEIGHT_M = 1.0
ROUGHNESS_M = 0.05
"""Grass to low crops (log-wind-profile articles after Oke)."""
PROFILE_DOUBT = 0.4
"""Relative standard uncertainty of the ground wind that the profile foretells."""
LEAST_TURBULENCE = 0.15
"""Turbulence intensity near the ground hardly falls below this (common practice)."""
SHARE_OF_CEILING = 2.0 / 3.0
"""Where the profile foretells more than the reading's unrest allows: the upper part of what it allows."""
HEADING_UNKNOWN_SHARE = 0.4
"""Mean of max(cos, 0)^2: 0.25 over all headings, 1 into the wind, where most take off and land (common practice)."""
HEADING_UNKNOWN_SPREAD = 0.35


@dataclass(frozen=True, slots=True)
class RestReading:
    """The probe's mean reading over one rest, its scatter, and the heading it stood at (NaN unknown)."""

    mean_pa: float
    scatter_pa: float
    samples: int
    heading_deg: float


@dataclass(frozen=True, slots=True)
class WindAloft:
    """Wind found by a preliminary fit and the height above the ground at which it blew."""

    north_mps: float
    east_mps: float
    height_m: float


def rest_readings(
    series: AirDataSeries, usable: BoolArray, attitude: AttitudeSamples | None
) -> tuple[RestReading, ...]:
    """One reading for each span at rest with enough usable samples."""
    readings = []
    for first, last in runs(series.at_rest):
        inside = np.arange(first, last)[usable[first:last]]
        if inside.size < FEWEST_SAMPLES:
            continue
        values = series.reading_pa[inside]
        middle = float(np.median(values))
        near = np.abs(values - middle) <= 5 * 1.4826 * float(np.median(np.abs(values - middle))) + 0.5
        readings.append(
            RestReading(
                float(values[near].mean()),
                float(values[near].std()),
                int(near.sum()),
                _heading_at_rest(attitude, series.time_s[inside]),
            )
        )
    return tuple(readings)


def zero_offset(
    series: AirDataSeries, settings: ProbeSettings, rests: Sequence[RestReading], wind: WindAloft | None
) -> ZeroOffset:
    """What is known of the zero: given before ground before prior."""
    if settings.zero_offset_pa is not None:
        uncertainty = GIVEN_PA if settings.zero_offset_uncertainty_pa is None else settings.zero_offset_uncertainty_pa
        return ZeroOffset(settings.zero_offset_pa, max(uncertainty, 1e-3), ZeroOffsetSource.GIVEN)
    if rests:
        value, uncertainty = _from_rest(rests, wind)
        return ZeroOffset(value, uncertainty, ZeroOffsetSource.GROUND)
    value, prior = (0.0, COMPENSATED_PRIOR_PA) if series.compensated_zero else RAW_PRIOR_PA
    uncertainty = prior if settings.zero_offset_uncertainty_pa is None else settings.zero_offset_uncertainty_pa
    rectangular = not series.compensated_zero and settings.zero_offset_uncertainty_pa is None
    return ZeroOffset(value, max(uncertainty, 1e-3), ZeroOffsetSource.PRIOR, rectangular)


def unknown_zero_offset() -> ZeroOffset:
    """Next to nothing known: for a flight whose own speeds contradict what was assumed."""
    return ZeroOffset(0.0, UNKNOWN_PRIOR_PA, ZeroOffsetSource.PRIOR)


def _heading_at_rest(attitude: AttitudeSamples | None, time_s: FloatArray) -> float:
    if attitude is None:
        return float("nan")
    inside = (attitude.time_s >= time_s[0]) & (attitude.time_s <= time_s[-1])
    yaw = np.radians(attitude.yaw_deg[inside])
    yaw = yaw[np.isfinite(yaw)]
    if yaw.size == 0:
        return float("nan")
    return float(np.degrees(np.arctan2(np.sin(yaw).mean(), np.cos(yaw).mean())))


def _from_rest(rests: Sequence[RestReading], wind: WindAloft | None) -> tuple[float, float]:
    """Zero and its standard uncertainty from the rests, each freed of the wind foretold."""
    values, variances = [], []
    for rest in rests:
        bias, doubt = _wind_bias(rest, wind)
        own = rest.scatter_pa**2 / max(min(rest.samples, 10 + rest.samples / 10), 1) + READING_FLOOR_PA**2
        values.append(rest.mean_pa - bias)
        variances.append(own + doubt**2)
    value, variance = np.array(values), np.array(variances)
    weight = (1 / variance) / (1 / variance).sum()
    mean = float(weight @ value)
    # rests that disagree (drift with temperature, other wind) say how far the zero can be off in between
    between = float(weight @ (value - mean) ** 2) if value.size > 1 else 0.0
    return mean, float(np.sqrt((weight**2) @ variance + between))


def _wind_bias(rest: RestReading, wind: WindAloft | None) -> tuple[float, float]:
    """Pressure of the ground wind in the probe and its standard uncertainty. [Pa]"""
    if wind is None:
        return 0.0, 0.0
    aloft = float(np.hypot(wind.north_mps, wind.east_mps))
    height = max(wind.height_m, 5.0)
    ground = aloft * float(np.log(PROBE_HEIGHT_M / ROUGHNESS_M) / np.log(height / ROUGHNESS_M))
    share, spread = HEADING_UNKNOWN_SHARE, HEADING_UNKNOWN_SPREAD
    if np.isfinite(rest.heading_deg):
        against = np.radians(rest.heading_deg) - np.arctan2(-wind.east_mps, -wind.north_mps)
        share = float(max(np.cos(against), 0.0) ** 2)
        spread = 0.15
    full = 0.5 * SEA_LEVEL_DENSITY_KGPM3 * ground**2
    bias, doubt = full * share, full * float(np.hypot(2 * PROFILE_DOUBT * share, spread))
    # gusts of at least LEAST_TURBULENCE would have moved the reading by twice that share of the pressure
    ceiling = rest.scatter_pa / (2 * LEAST_TURBULENCE)
    if bias + doubt > ceiling:
        value = SHARE_OF_CEILING * ceiling if bias > ceiling else bias
        return value, min(doubt, max(0.5 * ceiling, 0.02))
    return bias, doubt
