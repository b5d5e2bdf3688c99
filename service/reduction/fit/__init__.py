"""Scale and wind from the loiters: blocks -> robust start -> linear model in a gust field -> estimates."""

from service.reduction.fit.scale_and_wind import (
    PreliminaryFit,
    contradicts_zero,
    fit_scale_and_wind,
    preliminary_fit,
)
from service.reduction.fit.start import DelayPrior, OffsetPrior

__all__ = ["DelayPrior", "OffsetPrior", "PreliminaryFit", "contradicts_zero", "fit_scale_and_wind", "preliminary_fit"]
