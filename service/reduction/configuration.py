"""Which configuration of the aircraft (flaps, gear, payload) was in force at each sample."""

from collections.abc import Sequence

import numpy as np

from service.domain.arrays import FloatArray, IntArray
from service.domain.errors import WrongValues
from service.domain.settings import Configuration, ConfigurationTime


def configuration_in_force(
    time_s: FloatArray, configurations: Sequence[Configuration], times: Sequence[ConfigurationTime]
) -> IntArray:
    """Index into `configurations` at each time: the first one until a `ConfigurationTime` says otherwise.

    Parameters
    ----------
    time_s : (n,) float [s]
    configurations : the aircraft's, in the user's order; of two with the same name the first counts.
    times : changes, in any order; of two at the same instant the later in the sequence holds.

    Returns
    -------
    (n,) int; zeros where no configuration is defined at all.

    Raises
    ------
    WrongValues
        A change names a configuration that the aircraft does not have.
    """
    indices = {configuration.name: index for index, configuration in reversed(list(enumerate(configurations)))}
    unknown = {
        f"/settings/configuration_times/{index}/name": f"No configuration is named {change.name!r}."
        for index, change in enumerate(times)
        if change.name not in indices
    }
    if unknown:
        raise WrongValues("A configuration is put in force that the aircraft does not have.", unknown)
    ordered = sorted(times, key=lambda change: change.start_s)
    starts_s = np.array([change.start_s for change in ordered], dtype=np.float64)
    in_force = np.array([0, *(indices[change.name] for change in ordered)], dtype=np.int64)
    return in_force[np.searchsorted(starts_s, time_s, side="right")]
