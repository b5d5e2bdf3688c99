"""What is to go: logs and flights past their age, and files that nothing refers to.

Every step may be cut short and done again, by several at a time. Rows go before files, so that what is left by a sweep
that was killed is found by the next.
"""

import logging
import time
from collections.abc import Iterable, Iterator
from contextlib import suppress
from dataclasses import asdict, dataclass, fields
from datetime import UTC, datetime, timedelta
from itertools import islice
from pathlib import Path

from service.log_lines import ROOT, log_to_stderr
from service.storage.engine import open_engine
from service.storage.errors import NotKept, StorageUnavailable
from service.storage.flights import FlightStore
from service.storage.idempotency import KEPT_DAYS
from service.storage.log_store import LogStore, open_store
from service.storage.retention import Retention
from service.storage.series_store import SeriesStore
from service.work.settings import WorkSettings

ORPHAN_AGE_S = 3600.0
"""A younger file may still get its row: far more than an upload or a job takes from file to row."""
SPOOL_AGE_S = 24 * 3600.0
"""Of temporary files; slow uploads write to theirs for hours."""
SPOOL_PREFIX = "loiterwise-"
"""All our temporary files begin so."""
AT_ONCE = 500
"""Files that the database is asked about in one go."""

_log = logging.getLogger(ROOT)


@dataclass(frozen=True, slots=True)
class Swept:
    """How many of each went."""

    expired_flights: int = 0
    expired_logs: int = 0
    orphaned_logs: int = 0
    orphaned_series: int = 0
    unfinished_files: int = 0
    spooled_files: int = 0
    idempotency_keys: int = 0

    def __str__(self) -> str:
        went = [f"{getattr(self, each.name)} {each.name.replace('_', ' ')}" for each in fields(self)]
        return ", ".join(went)


def sweep(settings: WorkSettings) -> Swept:
    """Take away what is to go. Raises StorageUnavailable."""
    engine = open_engine(settings.database)
    try:
        blobs = open_store(settings.store)
        rows, logs, series = Retention(engine), LogStore(blobs), SeriesStore(blobs)
        return Swept(
            # first what needs no files
            idempotency_keys=rows.forget_once(_days_ago(KEPT_DAYS)),
            expired_flights=_expire_flights(settings.result_days, rows, FlightStore(engine), logs, series),
            expired_logs=_expire_logs(settings.log_days, rows, logs),
            orphaned_logs=_drop_orphaned_logs(rows, logs),
            orphaned_series=_drop_orphaned_series(rows, series),
            unfinished_files=blobs.discard_unfinished(ORPHAN_AGE_S),
            spooled_files=_clear_spool(Path(settings.spool)),
        )
    finally:
        engine.dispose()


def sweep_in_background(settings: WorkSettings) -> None:
    """The same for a process of its own. What cannot be done now is left to the next time."""
    log_to_stderr(settings.log_level)
    try:
        swept = sweep(settings)
    except StorageUnavailable as error:
        _log.warning("nothing more can be swept now", extra={"fields": {"cause": str(error.__cause__ or error)}})
    else:
        _log.info("swept", extra={"fields": asdict(swept)})


def _expire_flights(
    days: float | None, rows: Retention, flights: FlightStore, logs: LogStore, series: SeriesStore
) -> int:
    """Flights past their age, with all that belongs to them."""
    went = 0
    while days is not None and (old := rows.results_older_than(_days_ago(days))):
        for flight in old:
            # a client may have deleted it just now
            with suppress(NotKept):
                gone = flights.delete(flight.owner, flight.flight_id)
                went += 1
                for key in gone.series_keys:
                    series.delete(key)
                if gone.log_is_free:
                    rows.drop_log(gone.log_sha256, logs.delete)
    return went


def _expire_logs(days: float | None, rows: Retention, logs: LogStore) -> int:
    """Logs past their age; what was made of them stays."""
    went = 0
    while days is not None and (old := rows.logs_older_than(_days_ago(days))):
        for flight in old:
            went += rows.mark_log_deleted(flight.owner, flight.flight_id)
            rows.drop_log(flight.log_sha256, logs.delete)
    return went


def _drop_orphaned_logs(rows: Retention, logs: LogStore) -> int:
    """Logs without a flight: of uploads that ended between file and row, and what earlier sweeps left."""
    old = (log.sha256 for log in logs.list() if log.age_s > ORPHAN_AGE_S)
    return sum(
        rows.drop_log(sha256, logs.delete) for some in _in_batches(old) for sha256 in set(some) - rows.held_logs(some)
    )


def _drop_orphaned_series(rows: Retention, series: SeriesStore) -> int:
    """Series without a reduction: of jobs that were cancelled or fenced out at their end."""
    went = 0
    for some in _in_batches(blob.key for blob in series.list() if blob.age_s > ORPHAN_AGE_S):
        for key in set(some) - rows.held_series(some):
            series.delete(key)
            went += 1
    return went


def _clear_spool(folder: Path) -> int:
    """Temporary files of processes that were killed."""
    went = 0
    for path in folder.glob(SPOOL_PREFIX + "*"):
        with suppress(OSError):
            if path.is_file() and time.time() - path.stat().st_mtime > SPOOL_AGE_S:
                path.unlink()
                went += 1
    return went


def _in_batches(names: Iterable[str]) -> Iterator[list[str]]:
    left = iter(names)
    while some := list(islice(left, AT_ONCE)):
        yield some


def _days_ago(days: float) -> datetime:
    return datetime.now(UTC) - timedelta(days=days)
