"""The work itself, within the child: a kept log -> its summary, and its series in the store."""

import math
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from typing import Any

from schemas.aircraft import over_profile
from schemas.reduction import dump_reduction
from schemas.wire import decode, encode
from service.domain.results import Reduction
from service.storage.log_store import LogStore, open_store
from service.storage.series_store import SeriesStore, series_key
from service.version import METHOD
from service.work.order import Answer, Order

Reducer = Callable[..., Reduction]
"""As `service.intake.reduce_file`."""
SHARE_OF_REDUCING = 0.95
"""Of the progress; the rest is the writing of the series."""


def reduce_kept(order: Order, progress: Callable[[float], None]) -> Answer:
    """Reduce a kept flight.

    The settings are the aircraft's profile with those of the flight put over it, field by field within `aircraft`,
    `probe` and `warnings`; lists are taken whole, and a null takes the place of a value. The settings inside a batch
    were made the flight's own when it was kept, unless others came beside it.

    Raises
    ------
    UnreadableInput, WrongValues, InputTooLarge : the log or the settings.
    BlobMissing, BlobDamaged : the log is not what was stored.
    StorageUnavailable, OSError : log or series cannot be read or written now.
    """
    store, spool = open_store(order.store), Path(order.spool)
    spool.mkdir(parents=True, exist_ok=True, mode=0o700)
    with LogStore(store).file(order.log_sha256, spool) as path:
        reduction = reducer_named(order.reducer)(
            path,
            sha256=order.log_sha256,
            settings=over_profile(order.profile, order.settings),
            progress=lambda share: progress(SHARE_OF_REDUCING * share),
        )
    key = series_key(order.flight_id, order.number)
    SeriesStore(store, spool).write(key, reduction)
    progress(1.0)
    return answer_from(reduction, key)


def answer_from(reduction: Reduction, key: str) -> Answer:
    """What is kept of a reduction beside its series."""
    scale = reduction.calibration.total_speed_scale
    return Answer(
        summary=_plain(dump_reduction(reduction, ("faults",))),
        verdict=str(reduction.calibration.verdict),
        log_speed_scale=None if scale is None else math.log(scale.value),
        # to first order, as the GUM has it: u(ln s) = u(s) / s
        log_speed_scale_uncertainty=None if scale is None else scale.standard_uncertainty / scale.value,
        series_key=key,
        method=METHOD,
        flown_utc=reduction.inputs.start_utc,
    )


def reducer_named(dotted: str) -> Reducer:
    module, _, name = dotted.rpartition(".")
    found: Reducer = getattr(import_module(module), name)
    return found


def _plain(document: dict[str, Any]) -> dict[str, Any]:
    """As it goes over the wire: no arrays, null where there is no number."""
    decoded = decode(encode(document))
    assert isinstance(decoded, dict)
    return decoded
