"""What the service does with flights that are kept: the only place where storage, reading, series and pooling meet.

`Keeping` holds the stores of one process, opened when they are first needed: after a fork, and so that a service that
only answers one-shot requests never touches a database.
"""

import math
import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from schemas.aircraft import over_profile
from schemas.settings import load_settings
from service.config import PREFIX, Config
from service.domain.codes import LogFormat
from service.domain.errors import LoiterwiseError, WrongValues
from service.domain.kept import AircraftRecord, FlightRecord, JobState, NewFlight, PooledFlight, ReductionRecord
from service.domain.results import Estimate
from service.fleet.assess import assess
from service.fleet.mixtures import NORMAL_95
from service.fleet.records import Assessment, FlightFactor
from service.readers.registry import read_log
from service.storage.aircraft import AircraftStore
from service.storage.blobs import BlobStore
from service.storage.engine import open_engine, sqlite_url
from service.storage.errors import DatabaseTooNew, LogMissing, NotKept, StorageUnavailable
from service.storage.flights import FlightStore
from service.storage.idempotency import Once
from service.storage.jobs import JobQueue
from service.storage.keys import KeyStore
from service.storage.log_store import LogStore, open_store
from service.storage.retention import Retention
from service.storage.series_file import Group, SeriesAbsent, SeriesPart
from service.storage.series_store import SeriesStore
from service.storage.texts import aircraft_name
from service.thinning import thinned

SETTINGS_POINTER = "/settings"
MEDIA_TYPES = {
    LogFormat.ULOG: "application/octet-stream",
    LogFormat.CSV: "text/csv",
    LogFormat.BATCH: "application/json",
}
"""Of a log, by its content: what the client called it is not given to others."""
LOOK_EVERY_S, LOOK_LESS_OFTEN_S = 0.05, 0.5
CLOSED = frozenset({JobState.DONE, JobState.FAILED, JobState.CANCELLED})


class NothingKept(LoiterwiseError):
    """This server keeps no flights; the text says how it would."""


@dataclass(frozen=True, slots=True)
class Stores:
    """Everything of one process that keeps something."""

    flights: FlightStore
    aircraft: AircraftStore
    jobs: JobQueue
    keys: KeyStore
    retention: Retention
    blobs: BlobStore
    logs: LogStore
    series: SeriesStore


class Keeping:
    """The stores, opened at the first use; a failure to open them is tried again at the next."""

    def __init__(self, config: Config) -> None:
        self._config = config
        self._lock = threading.Lock()
        self._stores: Stores | None = None

    @property
    def keeps(self) -> bool:
        return self._config.keeps

    def stores(self) -> Stores:
        """Raises NothingKept, StorageUnavailable."""
        if not self.keeps:
            raise NothingKept(
                f"This server keeps no flights. Set {PREFIX}DATA to a folder (or {PREFIX}DATABASE_URL), "
                "or start it by `loiterwise serve`. POST /v1/reductions answers without keeping anything."
            )
        with self._lock:
            if self._stores is None:
                self._stores = open_stores(self._config)
            return self._stores

    def check(self) -> None:
        """Can database and log store be used? Raises StorageUnavailable. Nothing is checked when nothing is kept."""
        if self.keeps:
            kept = self.stores()
            kept.jobs.depth()
            kept.blobs.check_usable()


def database_of(config: Config) -> str:
    """URL of the database: as given, else a file in the data folder."""
    return config.database_url or sqlite_url(config.folder).render_as_string(hide_password=False)


def store_of(config: Config) -> str:
    """Folder or URL of logs and series: as given, else the data folder."""
    return config.log_store_url or str(config.folder)


def migrate(config: Config) -> None:
    """Bring the database to the tables of this version.

    Raises
    ------
    StorageUnavailable : it cannot be reached or written, or a newer version of the service has changed it.
    """
    # alembic is loaded only here: it is slow to load
    from service.storage.migrate import bring_up_to_date

    try:
        if config.database_url is None:
            config.folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        bring_up_to_date(database_of(config))
    except OSError as error:
        raise StorageUnavailable("The data folder cannot be made.") from error
    except DatabaseTooNew as error:
        raise StorageUnavailable(str(error)) from error


def open_stores(config: Config) -> Stores:
    """The stores that `config` asks for, their tables up to date. Raises StorageUnavailable."""
    migrate(config)
    engine = open_engine(database_of(config))
    blobs = open_store(store_of(config))
    return Stores(
        flights=FlightStore(engine),
        aircraft=AircraftStore(engine),
        jobs=JobQueue(engine, config.job_attempts),
        keys=KeyStore(engine),
        retention=Retention(engine),
        blobs=blobs,
        logs=LogStore(blobs),
        series=SeriesStore(blobs, config.spool),
    )


# --- flights ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class SentFlight:
    """A flight as it was sent: its log in a file."""

    path: Path
    sha256: str
    size: int
    settings: object | None
    """Decoded JSON beside the log; None where none came."""
    aircraft: str | None


@dataclass(frozen=True, slots=True)
class CheckedFlight:
    """A flight that can be read, with settings that are right."""

    sent: SentFlight
    settings: Mapping[str, Any]
    """Those beside the log, else those inside the batch."""
    log_format: LogFormat
    start_utc: datetime | None


def check_flight(kept: Stores, owner: str, sent: SentFlight) -> CheckedFlight:
    """Read the log once, so that what cannot be reduced is refused before it is kept.

    Raises
    ------
    UnreadableInput, WrongValues, InputTooLarge, StorageUnavailable
    """
    profile = {} if sent.aircraft is None else profile_of(kept, owner, aircraft_name(sent.aircraft))
    beside = _checked_settings(profile, sent.settings, SETTINGS_POINTER)
    columns = load_settings(over_profile(profile, beside), SETTINGS_POINTER).columns
    read = read_log(sent.path, sha256=sent.sha256, columns=columns or None)
    settings = beside if sent.settings is not None else _checked_settings(profile, read.settings, SETTINGS_POINTER)
    return CheckedFlight(sent, settings, read.log.format, read.log.start_utc)


def keep_flight(
    kept: Stores, owner: str, flight: CheckedFlight, *, once: Once | None = None, by: str | None = None
) -> tuple[str, int, bool]:
    """Keep log and flight, and queue its reduction: (flight, number of the reduction, whether it is new).

    The log is stored before the row: whatever happens between leaves a file without a row, which a sweep takes away.

    Raises
    ------
    IdempotencyConflict, WrongValues, StorageUnavailable
    """
    sent = flight.sent
    new = NewFlight(
        log_sha256=sent.sha256,
        log_bytes=sent.size,
        log_media_type=MEDIA_TYPES[flight.log_format],
        settings=flight.settings,
        aircraft=sent.aircraft,
        flown_utc=flight.start_utc,
    )
    present = _has_log(kept.logs)
    kept.logs.put(sent.path, sent.sha256)
    try:
        record, is_new = kept.flights.add(owner, new, once=once, by=by, log_present=present)
    except LogMissing:
        # a sweep took the file just then; once more, and it is fresh
        kept.logs.put(sent.path, sent.sha256)
        record, is_new = kept.flights.add(owner, new, once=once, by=by, log_present=present)
    return record.flight_id, 1, is_new


def _has_log(logs: LogStore) -> Callable[[str], bool]:
    return lambda sha256: logs.size(sha256) is not None


def profile_of(kept: Stores, owner: str, aircraft: str | None) -> Mapping[str, Any]:
    """The aircraft's profile; empty for one not known yet."""
    found = None if aircraft is None else find_aircraft(kept, owner, aircraft)
    return {} if found is None else found.profile


def reduce_again(
    kept: Stores, owner: str, flight_id: str, settings: object, *, once: Once | None = None, by: str | None = None
) -> tuple[ReductionRecord, bool]:
    """Queue another reduction of a flight; (the reduction, whether it is new).

    Raises
    ------
    NotKept, WrongValues, LogGone, IdempotencyConflict, StorageUnavailable
    """
    flight = kept.flights.get(owner, flight_id)
    # here a null is no way to say nothing
    given = _checked_settings(profile_of(kept, owner, flight.aircraft), [] if settings is None else settings, "")
    return kept.flights.add_reduction(owner, flight_id, given, once=once, by=by)


def _checked_settings(profile: Mapping[str, Any], settings: object, pointer: str) -> Mapping[str, Any]:
    """The settings as they were given, once they are right over that profile. None: none were given.

    Raises
    ------
    WrongValues : with JSON Pointers below `pointer`.
    """
    if settings is not None and not isinstance(settings, Mapping):
        raise WrongValues("The settings are wrong.", {pointer: "must be an object"})
    given = dict(settings or {})
    load_settings(over_profile(profile, given), pointer)
    return given


def wait_for(kept: Stores, owner: str, flight_id: str, number: int, longest_s: float) -> ReductionRecord:
    """The reduction once it is closed, or as it is after `longest_s`. Raises NotKept, StorageUnavailable."""
    until, pause_s = time.monotonic() + longest_s, LOOK_EVERY_S
    while True:
        reduction = kept.flights.reduction(owner, flight_id, number)
        left_s = until - time.monotonic()
        if reduction.state in CLOSED or left_s <= 0:
            return reduction
        time.sleep(min(pause_s, left_s))
        pause_s = min(pause_s * 1.2, LOOK_LESS_OFTEN_S)


def delete_flight(kept: Stores, owner: str, flight_id: str, *, by: str | None = None) -> None:
    """The flight goes with its log and series. Files that cannot be deleted now are left to the sweep.

    Raises
    ------
    NotKept, StorageUnavailable
    """
    gone = kept.flights.delete(owner, flight_id, by=by)
    try:
        for key in gone.series_keys:
            kept.series.delete(key)
        if gone.log_is_free:
            kept.retention.drop_log(gone.log_sha256, kept.logs.delete)
    except (OSError, StorageUnavailable):
        pass


def shown_reduction(kept: Stores, flight: FlightRecord, number: int | None) -> ReductionRecord:
    """The reduction whose result a part shows: the newest that is done, or the one asked for. Raises NotKept."""
    if number is not None:
        return kept.flights.reduction(flight.owner, flight.flight_id, number)
    return flight.done or flight.latest


# --- series -----------------------------------------------------------------------------------------------------------


def series_piece(
    kept: Stores,
    reduction: ReductionRecord,
    part: Group,
    *,
    from_s: float | None = None,
    to_s: float | None = None,
    step_s: float | None = None,
) -> SeriesPart | None:
    """`airspeed` or `stall_margins` of a reduction, inclusive of both ends; None where the flight has none.

    Raises
    ------
    StorageUnavailable
    """
    if reduction.series_key is None:
        return None
    found = kept.series.read(reduction.series_key, part, from_s, to_s)
    if isinstance(found, SeriesAbsent):
        return None
    if step_s is None or not found.flags.size:
        return found
    start_s = float(found.columns["time_s"][0]) if from_s is None else from_s
    return SeriesPart(*thinned(found.columns, found.flags, step_s, start_s))


# --- aircraft ---------------------------------------------------------------------------------------------------------


def find_aircraft(kept: Stores, owner: str, name: str) -> AircraftRecord | None:
    """The aircraft; None if there is none of that name. Raises StorageUnavailable."""
    try:
        return kept.aircraft.get(owner, name)
    except NotKept:
        return None


@dataclass(frozen=True, slots=True)
class PooledAircraft:
    """What the flights of an aircraft say together."""

    aircraft: AircraftRecord
    flights: tuple[PooledFlight, ...]
    """Behind the pool, in the order flown."""
    alone: Mapping[str, Estimate]
    """Flight -> total speed scale from it alone."""
    assessment: Assessment


def pool_aircraft(kept: Stores, owner: str, name: str) -> PooledAircraft:
    """Pool the accepted flights of the present installation. Raises NotKept, StorageUnavailable."""
    record = kept.aircraft.get(owner, name)
    flights = tuple(flight for flight in kept.flights.results_of(owner, name) if _can_be_pooled(flight))
    factors = [
        FlightFactor(flight.flight_id, flight.flown_utc, flight.log_speed_scale, flight.log_speed_scale_uncertainty)
        for flight in flights
    ]
    loaded = record.profile.get("probe", {}).get("applied_speed_scale")
    alone = {flight.flight_id: _estimate(flight) for flight in flights}
    return PooledAircraft(record, flights, alone, assess(factors, loaded_speed_scale=loaded))


def _can_be_pooled(flight: PooledFlight) -> bool:
    return math.isfinite(flight.log_speed_scale) and 0 < flight.log_speed_scale_uncertainty < math.inf


def _estimate(flight: PooledFlight) -> Estimate:
    """The speed scale from its logarithm, which is normal."""
    scale, deviation = math.exp(flight.log_speed_scale), flight.log_speed_scale_uncertainty
    reach = math.exp(NORMAL_95 * deviation)
    return Estimate(scale, scale * deviation, (scale / reach, scale * reach))
