"""Corrected series: airspeed of every probe sample, indicated to true, with its uncertainty and flags.

Impact pressure is `q = K (reading - b)`. Indicated airspeed takes the probe's nominal K, the others the fitted one;
both take the fitted zero offset b where there is a fit. Without a fit nothing is corrected: the nominal K stands for
both, every sample is flagged `UNCALIBRATED`, and the uncertainty is NaN, since nobody knows it.

Standard uncertainty
--------------------
It is carried in pressure, and only then to airspeed:

- scale and zero offset, from the fit's covariance of (ln K, b), correlation included;
- outside the flown airspeeds, the change of the static-port error, which K was never asked about there. Such errors
  are 1 to 5 % of impact pressure and grow toward low speed and sideslip (common practice). The upper figure may build
  up on the way from a loiter speed, some 1.6 times the stall speed, down to the stall: 5 % over ln 1.6 is 10 % per
  unit of ln V. It is added to the scale's share as it is, not as a square: it goes one way, and that may be the way
  in which the scale is wrong;
- the sensor's noise, estimated from the readings themselves (`reading_noise`).

Density (temperature and static pressure) has a share in the uncertainty of K, hence of calibrated airspeed. It has
none in true airspeed: K was found from the true airspeed that GPS and wind gave, with the same density, and the two
errors cancel.

Toward zero pressure the derivative of airspeed has no bound. It is therefore taken at `hypot(q, c u)` in place of q,
u being the uncertainty of q: far from zero nothing changes, and at a reading of zero, where the true pressure is the
positive half of a normal distribution, `c = sqrt(pi/32)` makes the result exactly the root mean square of airspeed.

Samples that are missing or faulty have no uncertainty (NaN): the model above does not hold for them.
"""

import math
from typing import Final

import numpy as np

from service.airdata.pitot import (
    calibrated_airspeed_from_impact_pressure,
    calibrated_airspeed_slope,
    equivalent_airspeed_from_impact_pressure,
    true_airspeed_from_impact_pressure,
    true_airspeed_slope,
)
from service.domain.arrays import BoolArray, FlagArray, FloatArray
from service.domain.codes import Flag
from service.domain.results import AirDataSeries, CorrectedSeries, FitResult, nan_array
from service.domain.settings import ProbeSettings

EXTRAPOLATED_SCALE_UNCERTAINTY: Final = 0.05 / float(np.log(1.6))
"""Growth of the uncertainty of ln K per unit of ln(airspeed) outside the flown range; argued above."""
NEAR_ZERO: Final = float(np.sqrt(np.pi / 32.0))
"""The constant c above: E[V^2] = V(u)^2 sqrt(2/pi) for a half-normal pressure of scale u."""
SLOW_STEP_S: Final = 0.2
"""Sampling slower than this, third differences have nothing smooth left to remove."""
INERTIAL_LAG_RATIO: Final = float(2.0 ** (2.0 / 3.0))
"""Growth of the squared velocity difference from one lag to two in turbulence (Kolmogorov's two-thirds law)."""
TYPICAL_NOISE_PA: Final = 0.7
"""Assumed where the readings do not clearly tell of more (common practice: 0.5 to 1 Pa)."""
CLEAR: Final = 2.0
"""Standard errors by which the growth of the differences, and the noise, must stand out to be used."""
MEDIAN_ERROR: Final = 3.5
"""Relative standard error of a variance taken from the median absolute deviation, times the root of the count: 2.33 for
independent values, 1.5 times that for third differences, which are not."""
FEWEST_FOR_NOISE: Final = 12
LARGEST_READING_PA: Final = 1e6
"""Ten atmospheres: whatever reads this is no probe, and its numbers may be too large to compute with."""


def corrected_series(
    series: AirDataSeries,
    fit: FitResult | None,
    probe: ProbeSettings,
    faulty: BoolArray,
    zero_offset_pa: float,
) -> CorrectedSeries:
    """Airspeeds at the times of `series`.

    Parameters
    ----------
    series : n samples.
    fit : None when there is no calibration, or when it is refused.
    faulty : (n,) samples whose reading is not to be trusted.
    zero_offset_pa : subtracted where there is no fit; a fit brings its own. [Pa]
    """
    offset_pa = zero_offset_pa if fit is None else fit.zero_offset_pa
    difference_pa = np.where(np.abs(series.reading_pa) < LARGEST_READING_PA, series.reading_pa, np.nan) - offset_pa
    impact_pa = (probe.nominal_pressure_scale if fit is None else fit.pressure_scale) * difference_pa
    calibrated = calibrated_airspeed_from_impact_pressure(impact_pa)
    true = true_airspeed_from_impact_pressure(impact_pa, series.static_pressure_pa, series.air_temperature_k)
    indicated = calibrated
    calibrated_uncertainty = true_uncertainty = nan_array(impact_pa.size)
    if fit is not None:
        indicated = calibrated_airspeed_from_impact_pressure(probe.nominal_pressure_scale * difference_pa)
        positive_pa = np.where(faulty | np.isnan(calibrated), np.nan, np.maximum(impact_pa, 0.0))
        outside_pa = EXTRAPOLATED_SCALE_UNCERTAINTY * _log_distance(calibrated, fit.airspeed_range_mps) * positive_pa
        noise_pa = fit.pressure_scale * reading_noise(*_sound_readings(series, faulty))
        calibrated_uncertainty = _calibrated_uncertainty(
            positive_pa, np.hypot(_fitted_uncertainty(fit, positive_pa, 0.0) + outside_pa, noise_pa)
        )
        known_density = _fitted_uncertainty(fit, positive_pa, fit.log_density_uncertainty)
        true_uncertainty = _true_uncertainty(series, positive_pa, np.hypot(known_density + outside_pa, noise_pa))
    return CorrectedSeries(
        time_s=series.time_s,
        indicated_mps=indicated,
        calibrated_mps=calibrated,
        equivalent_mps=equivalent_airspeed_from_impact_pressure(impact_pa, series.static_pressure_pa),
        true_mps=true,
        calibrated_standard_uncertainty_mps=calibrated_uncertainty,
        true_standard_uncertainty_mps=true_uncertainty,
        flags=_flags(series, fit, faulty, impact_pa, calibrated),
    )


def reading_noise(reading_pa: FloatArray, step_s: float) -> float:
    """Standard deviation of the sensor's noise, told from the air's own changes by their pace. [Pa]

    At a fast sampling third differences remove what is smooth, at a slow one first differences must do. Turbulence
    changes the reading from one sample to the next as well: the squared differences are followed back from two lags
    and one to none, by the two-thirds law. Where that does not clearly tell the noise, a typical one is assumed. All is
    robust (median), and blind to a value that a recorder merely repeats.

    Parameters
    ----------
    reading_pa : (k,) float, finite, in order of time, free of known faults. [Pa]
    step_s : typical time between them. [s]

    Returns
    -------
    float ; 0 for fewer than `FEWEST_FOR_NOISE` distinct successive readings.
    """
    fresh = reading_pa[np.concatenate([[True], np.diff(reading_pa) != 0.0])] if reading_pa.size else reading_pa
    if fresh.size < FEWEST_FOR_NOISE:
        return 0.0
    order = 3 if step_s <= SLOW_STEP_S else 1
    one_lag, two_lags = (_noise_variance(fresh, order, lag) for lag in (1, 2))
    unsure = MEDIAN_ERROR / fresh.size**0.5
    growth = two_lags - one_lag
    if growth < CLEAR * unsure * math.hypot(one_lag, two_lags):
        return math.sqrt(one_lag)
    share = 1.0 / (INERTIAL_LAG_RATIO - 1.0)
    variance = one_lag - share * growth
    error = unsure * math.hypot((1 + share) * one_lag, share * two_lags)
    if variance < CLEAR * error:
        variance = max(variance - error, min(TYPICAL_NOISE_PA**2, one_lag))
    return math.sqrt(variance)


def _noise_variance(readings_pa: FloatArray, order: int, lag: int) -> float:
    """Variance of the noise if nothing else made the differences of that order at that lag. [Pa^2]"""
    differences = readings_pa
    for _ in range(order):
        differences = differences[lag:] - differences[:-lag]
    return _spread(differences) ** 2 / math.comb(2 * order, order)


def _spread(differences: FloatArray) -> float:
    """Standard deviation of differences about zero, blind to spikes."""
    return float(1.4826 * np.median(np.abs(differences)))


def _sound_readings(series: AirDataSeries, faulty: BoolArray) -> tuple[FloatArray, float]:
    """Readings of the flight, or of the ground where there are too few, and the step of time between samples."""
    sound = (np.abs(series.reading_pa) < LARGEST_READING_PA) & ~faulty
    flown = sound & ~series.on_ground
    used = flown if flown.sum() >= FEWEST_FOR_NOISE else sound
    step_s = float(np.median(np.diff(series.time_s))) if series.time_s.size > 1 else 0.0
    return series.reading_pa[used], step_s


def _fitted_uncertainty(fit: FitResult, positive_pa: FloatArray, log_density_uncertainty: float) -> FloatArray:
    """(n,) standard uncertainty of impact pressure from scale and zero offset, without the share of density. [Pa]"""
    (scale_scale, scale_offset), (_, offset_offset) = fit.covariance
    scale_scale = max(scale_scale - log_density_uncertainty**2, 0.0)
    # derivatives of impact pressure by ln K, and by the zero offset
    by_scale, by_offset = positive_pa, -fit.pressure_scale
    variance = by_scale**2 * scale_scale + 2.0 * by_scale * by_offset * scale_offset + by_offset**2 * offset_offset
    uncertainty: FloatArray = np.sqrt(np.maximum(variance, 0.0))
    return uncertainty


def _log_distance(airspeed_mps: FloatArray, flown_mps: tuple[float, float]) -> FloatArray:
    """(n,) how far outside the flown range, in ln(airspeed); 0 inside."""
    airspeed = np.maximum(airspeed_mps, 1e-6)
    slowest, fastest = (max(limit, 1e-6) for limit in flown_mps)
    return np.maximum(np.maximum(np.log(slowest / airspeed), np.log(airspeed / fastest)), 0.0)


def _calibrated_uncertainty(positive_pa: FloatArray, uncertainty_pa: FloatArray) -> FloatArray:
    at_pa = np.hypot(positive_pa, NEAR_ZERO * uncertainty_pa)
    return calibrated_airspeed_slope(at_pa) * _ratio(uncertainty_pa, at_pa)


def _true_uncertainty(series: AirDataSeries, positive_pa: FloatArray, uncertainty_pa: FloatArray) -> FloatArray:
    at_pa = np.hypot(positive_pa, NEAR_ZERO * uncertainty_pa)
    slope = true_airspeed_slope(at_pa, series.static_pressure_pa, series.air_temperature_k)
    return slope * _ratio(uncertainty_pa, at_pa)


def _ratio(part: FloatArray, whole: FloatArray) -> FloatArray:
    """0 where both are 0: a fit without any uncertainty."""
    return part / np.where(whole == 0.0, 1.0, whole)


def _flags(
    series: AirDataSeries, fit: FitResult | None, faulty: BoolArray, impact_pa: FloatArray, calibrated_mps: FloatArray
) -> FlagArray:
    missing = np.isnan(series.reading_pa)
    raised: dict[Flag, BoolArray | bool] = {
        Flag.MISSING: missing,
        Flag.BELOW_ZERO: impact_pa < 0.0,
        Flag.UNCALIBRATED: fit is None,
        # a reading that gives no subsonic airspeed is no reading of ours
        Flag.FAULTY: faulty | (np.isnan(calibrated_mps) & ~missing),
        Flag.ON_GROUND: series.on_ground,
        Flag.STANDARD_STATIC: series.standard_static,
        Flag.STANDARD_TEMPERATURE: series.standard_temperature,
        Flag.TIME_REORDERED: series.reordered,
    }
    if fit is not None:
        raised[Flag.EXTRAPOLATED] = _log_distance(calibrated_mps, fit.airspeed_range_mps) > 0.0
    flags = np.zeros(impact_pa.size, dtype=np.uint32)
    for flag, samples in raised.items():
        flags |= np.where(samples, np.uint32(flag), np.uint32(0))
    return flags
