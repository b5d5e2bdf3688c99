"""What a set of headings covers of the circle: the contract's measure of whether a flight can hold a calibration."""

import numpy as np
from numpy.typing import ArrayLike


def heading_coverage(heading_deg: ArrayLike) -> float:
    """360 degrees less the largest gap between the headings (n,), NaN left out; 0 for fewer than two. [deg]"""
    headings = np.asarray(heading_deg, dtype=np.float64).ravel()
    ordered = np.sort(np.mod(headings[np.isfinite(headings)], 360.0))
    if ordered.size < 2:
        return 0.0
    return float(360.0 - np.diff(np.append(ordered, ordered[0] + 360.0)).max())
