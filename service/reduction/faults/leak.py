"""Leak: the pressure scale steps in mid-flight. Looked for after a first fit, which knows wind and scale."""

from service.domain.results import Fault, FitResult, FittedPoints, Loiter


def find_scale_step(points: FittedPoints, loiters: tuple[Loiter, ...], fit: FitResult) -> Fault | None:
    """The span of flight that fits another scale than the rest, if any."""
    return None
