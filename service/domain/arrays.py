"""Array types shared by every layer."""

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
IntArray = npt.NDArray[np.int64]
FlagArray = npt.NDArray[np.uint32]
"""Bit masks over :class:`service.domain.codes.Flag`, one per sample."""
