"""Figures as a publication prints them: strings, so that their last digit is known."""

from decimal import Decimal
from typing import SupportsFloat


def half_unit(figure: str) -> float:
    """Half a unit of the last digit printed, with a hair for binary rounding."""
    return 0.5000001 * float(Decimal(1).scaleb(int(Decimal(figure).as_tuple().exponent)))


def agrees(computed: SupportsFloat, figure: str) -> bool:
    """Whether the computed number rounds to the printed figure."""
    return abs(float(computed) - float(figure)) <= half_unit(figure)
