"""Faults of the sensors, with the time for which they hold.

`find_faults` looks before the fit, when no wind is known; `find_scale_step` after a first fit, which a leak needs.
To add a fault: write a module with one function `FlightEvidence -> list[Finding]`, put it into the list of `find.py`.
"""

from service.reduction.faults.find import CHECKS, find_faults
from service.reduction.faults.leak import find_scale_step

__all__ = ["CHECKS", "find_faults", "find_scale_step"]
