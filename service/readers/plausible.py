"""What values are physically possible: outside them a column is in another unit, or no measurement."""

from collections.abc import Mapping
from types import MappingProxyType

import numpy as np

from service.domain.arrays import BoolArray, FloatArray

POSSIBLE: Mapping[str, tuple[float, float]] = MappingProxyType(
    {
        "impact_pressure_pa": (-2e5, 2e5),
        # 26 km of altitude; hectopascals and kilopascals fall below
        "static_pressure_pa": (2e3, 1.2e5),
        # degrees Celsius fall below
        "air_temperature_k": (150.0, 350.0),
        # saturated sensors read a little above 1; per cent falls above
        "relative_humidity": (0.0, 1.05),
        "velocity_north_mps": (-500.0, 500.0),
        "velocity_east_mps": (-500.0, 500.0),
        "velocity_down_mps": (-500.0, 500.0),
        "ground_speed_mps": (0.0, 500.0),
        "track_deg": (-360.0, 360.0),
        "latitude_deg": (-90.0, 90.0),
        "longitude_deg": (-180.0, 360.0),
        "altitude_m": (-1.5e3, 5e4),
        "speed_uncertainty_mps": (0.0, 1e4),
        "fix": (0.0, 20.0),
        "roll_deg": (-360.0, 360.0),
        "pitch_deg": (-180.0, 180.0),
        "yaw_deg": (-360.0, 360.0),
        "load_factor": (-100.0, 100.0),
    }
)
"""Column -> lowest and highest possible value, in the unit of its name."""


def possible(column: str, values: FloatArray) -> BoolArray:
    """(n,) whether each value can be one; NaN cannot."""
    low, high = POSSIBLE[column]
    return (values >= low) & (values <= high)


def cleaned(column: str, values: FloatArray) -> FloatArray:
    """The values with NaN in place of impossible ones."""
    return np.where(possible(column, values), values, np.nan)
