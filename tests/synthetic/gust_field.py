"""Gust fields frozen (or slowly turning over) in the air mass, as sums of random Fourier modes.

Kinematic simulation (Kraichnan 1970; Fung et al. 1992): a solenoidal field is a sum of plane waves whose velocity is
perpendicular to their wave vector; wave numbers follow the energy spectrum E(k), directions are uniform on the sphere.
With the substitution t = x^2/(1 + x^2), x = k times the spectrum's length, both spectra become beta distributions of t,
so wave numbers are drawn exactly, without a cut at either end:

- von Karman, E ~ x^4/(1 + x^2)^(17/6), x = 1.339 k L: t ~ Beta(5/2, 1/3);
- Dryden, E ~ x^4/(1 + x^2)^3, x = k L: t ~ Beta(5/2, 1/2).

Half of the modes are drawn from the spectrum, half from one that favours long waves (they make the mean over a loiter);
weights make the sum unbiased. Amplitudes are Gaussian, so the field is Gaussian given its modes.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt
from scipy.special import gamma, kv
from scipy.stats import beta, qmc

from service.domain.arrays import FloatArray

MODES = 600
VON_KARMAN_LENGTH = 1.339
"""Length of the spectrum over the integral length."""


class Spectrum(StrEnum):
    VON_KARMAN = "von_karman"
    DRYDEN = "dryden"


_TAIL = {Spectrum.VON_KARMAN: 1.0 / 3.0, Spectrum.DRYDEN: 0.5}
_SPECTRUM_LENGTH = {Spectrum.VON_KARMAN: VON_KARMAN_LENGTH, Spectrum.DRYDEN: 1.0}
_ENERGY_EXPONENT = 2.5
_LONG_WAVE_EXPONENT = 1.0


@dataclass(frozen=True, slots=True)
class GustModel:
    """What a gust field is drawn from.

    `sigma_mps` is the standard deviation per component, `length_m` the longitudinal integral length. With
    `vertical_sigma_mps` and `vertical_length_m` the field is anisotropic: the horizontal components are those of an
    isotropic field of sigma and length, the vertical one that of another, independent field (right spectra and
    cross-spectra of each, not exactly solenoidal). `turnover_s` is the time in which the correlation with the field of
    before falls to 1/e; infinite: frozen.
    """

    spectrum: Spectrum
    sigma_mps: float
    length_m: float
    turnover_s: float = np.inf
    vertical_sigma_mps: float | None = None
    vertical_length_m: float | None = None


def low_altitude_dryden(horizontal_sigma_mps: float, height_m: float) -> GustModel:
    """The anisotropic model of MIL-F-8785C below 1000 ft, its ratios at one height used throughout.

    L_w = h, L_u = h/(0.177 + 0.000823 h)^1.2, sigma_w/sigma_u = (0.177 + 0.000823 h)^0.4, h in feet (check values g).
    """
    height_ft = height_m / 0.3048
    base = 0.177 + 0.000823 * height_ft
    return GustModel(
        spectrum=Spectrum.DRYDEN,
        sigma_mps=horizontal_sigma_mps,
        length_m=height_m / base**1.2,
        vertical_sigma_mps=horizontal_sigma_mps * base**0.4,
        vertical_length_m=height_m,
    )


def longitudinal_correlation(spectrum: Spectrum, separation_m: FloatArray, length_m: float) -> FloatArray:
    """f(r) of method.md. Shape of `separation_m`; f(0) = 1."""
    if spectrum is Spectrum.DRYDEN:
        return np.asarray(np.exp(-separation_m / length_m))
    scaled = np.maximum(separation_m / (VON_KARMAN_LENGTH * length_m), 1e-9)
    return np.asarray(2.0 ** (2.0 / 3.0) / gamma(1.0 / 3.0) * np.cbrt(scaled) * kv(1.0 / 3.0, scaled))


def lateral_correlation(spectrum: Spectrum, separation_m: FloatArray, length_m: float) -> FloatArray:
    """g = f + (r/2) f' of an isotropic solenoidal field. Shape of `separation_m`."""
    along = longitudinal_correlation(spectrum, separation_m, length_m)
    if spectrum is Spectrum.DRYDEN:
        return np.asarray(along * (1.0 - separation_m / (2.0 * length_m)))
    scaled = np.maximum(separation_m / (VON_KARMAN_LENGTH * length_m), 1e-9)
    # (z^n K_n)' = -z^n K_(n-1)
    slope = 2.0 ** (2.0 / 3.0) / gamma(1.0 / 3.0) * np.cbrt(scaled) * kv(2.0 / 3.0, scaled)
    return np.asarray(along - 0.5 * scaled * slope)


def _directions(height: FloatArray, azimuth: FloatArray, turned: FloatArray) -> tuple[FloatArray, FloatArray]:
    """From uniform deviates: unit vectors (3, count) all over the sphere, and one across each, all about it."""
    along = 2.0 * height - 1.0
    level, angle, about = np.sqrt(1.0 - along**2), 2.0 * np.pi * azimuth, 2.0 * np.pi * turned
    direction = np.array([level * np.cos(angle), level * np.sin(angle), along])
    first = np.array([-np.sin(angle), np.cos(angle), np.zeros_like(angle)])
    second = np.cross(direction, first, axis=0)
    return direction, np.cos(about) * first + np.sin(about) * second


def _wave_numbers(
    spectrum: Spectrum, length_m: float, energy_deviates: FloatArray, length_deviates: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Wave numbers [rad/m] and each one's share of the energy, both (count,); shares sum to 1 on average."""
    tail = _TAIL[spectrum]
    half, rest = energy_deviates.size, length_deviates.size
    count = half + rest
    by_energy = beta.ppf(energy_deviates, _ENERGY_EXPONENT, tail)
    by_length = beta.ppf(length_deviates, _LONG_WAVE_EXPONENT, tail)
    # a draw of exactly 1 would be an infinite wave number
    share = np.clip(np.concatenate((by_energy, by_length)), 1e-12, 1.0 - 1e-12)
    # both densities share the factor (1 - t)^(tail - 1), which cancels in the weight
    ratio = share ** (_LONG_WAVE_EXPONENT - _ENERGY_EXPONENT) * _beta_norm(_ENERGY_EXPONENT, _LONG_WAVE_EXPONENT, tail)
    weight = 1.0 / (half / count + rest / count * ratio)
    number = np.sqrt(share / (1.0 - share)) / (_SPECTRUM_LENGTH[spectrum] * length_m)
    return number, weight / count


def _beta_norm(numerator: float, denominator: float, tail: float) -> float:
    """B(numerator, tail) / B(denominator, tail)."""
    up = gamma(numerator) * gamma(denominator + tail)
    return float(up / (gamma(numerator + tail) * gamma(denominator)))


def _isotropic_modes(
    spectrum: Spectrum, sigma_mps: float, length_m: float, rng: np.random.Generator, count: int
) -> tuple[FloatArray, FloatArray]:
    """Wave vectors [rad/m] and velocity amplitudes [m/s], both (3, count)."""
    half = count // 2
    # spread evenly over wave numbers and directions together, so that no field is far from isotropic by chance
    energy, length = (qmc.Halton(4, rng=rng).random(part).T for part in (half, count - half))
    number, share = _wave_numbers(spectrum, length_m, energy[0], length[0])
    direction, across = _directions(*np.hstack((energy[1:], length[1:])))
    # a Rayleigh amplitude with a uniform phase is a Gaussian cosine and sine; mean square of the sum is 3 sigma^2
    size = rng.rayleigh(1.0, count) * np.sqrt(3.0 * share) * sigma_mps
    return direction * number, across * size


def _modes(model: GustModel, rng: np.random.Generator, count: int) -> tuple[FloatArray, FloatArray]:
    if model.vertical_sigma_mps is None or model.vertical_length_m is None:
        return _isotropic_modes(model.spectrum, model.sigma_mps, model.length_m, rng, count)
    vertical = count // 3
    wave, level = _isotropic_modes(model.spectrum, model.sigma_mps, model.length_m, rng, count - vertical)
    upward = _isotropic_modes(model.spectrum, model.vertical_sigma_mps, model.vertical_length_m, rng, vertical)
    level[2] = 0.0
    upward[1][:2] = 0.0
    return np.hstack((wave, upward[0])), np.hstack((level, upward[1]))


class GustField:
    """The gust fields of F flights, each with its own modes, evaluated together.

    Phases are kept in turns and in double precision; once the whole turns are taken off, single precision is enough
    for the cosines and several times faster.
    """

    def __init__(self, models: Sequence[GustModel], generators: Sequence[np.random.Generator], modes: int = MODES):
        flights = len(models)
        self.wave = np.empty((flights, modes, 3))
        """Wave vectors. [turns/m]"""
        self.amplitude = np.empty((flights, 3, modes), dtype=np.float32)
        self.phase = np.empty((flights, modes))
        self.frequency = np.zeros((flights, modes))
        """[turns/s]"""
        for index, (model, rng) in enumerate(zip(models, generators, strict=True)):
            wave, self.amplitude[index] = _modes(model, rng, modes)
            self.wave[index] = wave.T / (2.0 * np.pi)
            self.phase[index] = rng.random(modes)
            # frequencies of a Cauchy distribution make the correlation in time exp(-t / turnover)
            self.frequency[index] = rng.standard_cauchy(modes) / (2.0 * np.pi * model.turnover_s)
        self._turning = bool(np.any(self.frequency))

    def velocity(self, position_m: FloatArray, time_s: float) -> FloatArray:
        """Gust at one position per flight.

        Parameters
        ----------
        position_m : (3, F)
            In the air mass: north, east, down. [m]
        time_s : float
            [s]

        Returns
        -------
        (3, F) north, east, down [m/s].
        """
        turns = np.matmul(self.wave, position_m.T[:, :, None])[:, :, 0]
        turns += self.phase
        if self._turning:
            turns += self.frequency * time_s
        cosines = _cosine_of_turns(turns)
        gust = np.matmul(self.amplitude, cosines[:, :, None])[:, :, 0]
        return np.asarray(gust.T, dtype=np.float64)

    def along(self, flight: int, position_m: FloatArray, time_s: float = 0.0) -> FloatArray:
        """Gust of one flight's field at many positions (3, n) at one time -> (3, n) [m/s]."""
        turns = self.wave[flight] @ position_m
        turns += (self.phase[flight] + self.frequency[flight] * time_s)[:, None]
        return np.asarray(self.amplitude[flight] @ _cosine_of_turns(turns), dtype=np.float64)


def _cosine_of_turns(turns: FloatArray) -> npt.NDArray[np.float32]:
    part = (turns - np.rint(turns)).astype(np.float32)
    return np.asarray(np.cos(np.float32(2.0 * np.pi) * part))
