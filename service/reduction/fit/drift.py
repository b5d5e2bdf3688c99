"""Drift of the gust field over the ground, and how far it is known.

The field drifts with the mean wind of a wide neighbourhood. What least squares finds is that wind plus the mean gust
over the loiter, and it matters where a path meets the same air again: circles or squares that close in the air mass, or
over one spot in light wind. So the drift is the wind of the linear model, freed of the mean gust by generalised least
squares in a typical field; and what remains unknown of it blurs the field from one pass to the next (`sweeping`).
"""

from service.airdata.gusts import GustGeometry
from service.domain.results import AirDataSeries
from service.reduction.fit.blocks import Blocks
from service.reduction.fit.gust_posterior import Columns, LinearModel, typical_mean
from service.reduction.fit.linear_model import gust_geometry
from service.reduction.fit.start import Residuals, State

SWEEPING = 1.5
"""Standard uncertainty of the drift over the residuals' root mean square. The mean gust over a loiter, which least
squares takes for wind, is about as large; twice or half of it serves as well in simulated flights."""


def drifting_field(
    series: AirDataSeries, blocks: Blocks, state: State, now: Residuals, model: LinearModel, residual_rms_mps: float
) -> GustGeometry:
    """The path in the gust field."""
    sweeping = SWEEPING * residual_rms_mps
    first = gust_geometry(series, blocks, now, state.wind_mps, sweeping)
    shift = typical_mean(model, first, residual_rms_mps)[Columns(len(state.wind_mps)).winds]
    return gust_geometry(series, blocks, now, state.wind_mps + shift.reshape(-1, 2), sweeping)
