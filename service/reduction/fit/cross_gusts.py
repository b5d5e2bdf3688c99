"""Second-order effect of gusts across the path on the mean residual (method notes, trap 4).

A gust across the path lengthens the air velocity if the aircraft does not follow it, and the wind-corrected ground
velocity if it does: with the share c of it followed, probe minus ground side is ``s^2 (1 - 2c) / 2V`` on average, c
being the correlation E[g v] / s^2 of the gust with the motion v that it causes. c is read off the motion itself: the
sideways wander about a smooth circle, and the vertical velocity, against the gust that the fit found.
"""

from dataclasses import dataclass

import numpy as np

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray
from service.reduction.fit.blocks import Blocks

SHARE_DOUBT = 0.2
"""Standard uncertainty of c: the motion shows its variance, not its correlation with the gust."""
SHARE_EXPONENT = 0.75
"""c lies between the ratio of variances (a lagging follower) and its root (an eager one)."""
VERTICAL_RATIO = 0.8
VERTICAL_RATIO_DOUBT = 0.3
"""Vertical over horizontal gust variance: below 1 near the ground (check values, section g)."""


@dataclass(frozen=True, slots=True)
class CrossGusts:
    """Mean residual that cross gusts of unit variance leave, times the airspeed, and its standard uncertainty. [1]"""

    value: float
    standard_uncertainty: float


def cross_gusts(
    blocks: Blocks,
    air_velocity_mps: FloatArray,
    position_m: FloatArray,
    intensity_mps: float,
    length_m: float,
    has_velocity_down: bool,
) -> CrossGusts:
    """Judge the shares followed.

    Parameters
    ----------
    air_velocity_mps : (k, 3) ground velocity less wind, block means.
    position_m : (k, 3) positions in the air mass.
    """
    variance = max(intensity_mps, 1e-3) ** 2
    sideways, expected = _sideways_wander(blocks, air_velocity_mps, position_m, length_m)
    lateral = _share(sideways / max(variance * expected, 1e-9))
    vertical = _share(float(np.var(air_velocity_mps[:, 2])) / (variance * VERTICAL_RATIO)) if has_velocity_down else 0.5
    value = 0.5 * ((1 - 2 * lateral) + VERTICAL_RATIO * (1 - 2 * vertical))
    doubt = np.hypot(SHARE_DOUBT, SHARE_DOUBT * VERTICAL_RATIO)
    doubt = np.hypot(doubt, 0.5 * VERTICAL_RATIO_DOUBT * (1 - 2 * vertical))
    return CrossGusts(float(value), float(doubt))


def _share(ratio: float) -> float:
    return float(np.clip(ratio, 0.0, 1.0) ** SHARE_EXPONENT)


def _sideways_wander(
    blocks: Blocks, air_velocity_mps: FloatArray, position_m: FloatArray, length_m: float
) -> tuple[float, float]:
    """Variance of the sideways velocity about a smooth circle [m^2/s^2], and what unit gusts would show there."""
    heading = np.arctan2(air_velocity_mps[:, 1], air_velocity_mps[:, 0])
    speed = np.hypot(air_velocity_mps[:, 0], air_velocity_mps[:, 1])
    across = np.column_stack([-np.sin(heading), np.cos(heading), np.zeros(heading.size)])
    total, expected, weight = 0.0, 0.0, 0
    for index in np.unique(blocks.loiter).tolist():
        inside = np.flatnonzero(blocks.loiter == index)
        if inside.size < 12:
            continue
        angle = np.unwrap(heading[inside])
        steady = np.linspace(angle[0], angle[-1], inside.size)
        basis = np.column_stack(
            [np.ones(inside.size), np.linspace(-1, 1, inside.size)]
            + [wave(order * steady) for order in (1, 2) for wave in (np.cos, np.sin)]
        )
        smooth, _ = np.linalg.qr(basis)
        wander = angle - smooth @ (smooth.T @ angle)
        gust = GustGeometry(position_m[inside], across[inside], blocks.seconds * float(speed.mean())).covariance(
            length_m
        )
        total += float(np.sum((speed[inside] * wander) ** 2))
        expected += float(np.trace(gust) - np.sum(smooth * (gust @ smooth)))
        weight += inside.size - basis.shape[1]
    return (total / weight, expected / weight) if weight else (0.0, 1.0)
