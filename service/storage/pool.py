"""Which results may be pooled into the factor of an aircraft."""

from typing import Any

from sqlalchemy import Connection, Row, and_, or_, select

from service.domain.kept import PooledFlight
from service.storage.aircraft import one_aircraft
from service.storage.flight_rows import stale_of
from service.storage.tables import aircraft, flights, reductions

ACCEPTED = "accepted"


def results_of(connection: Connection, owner: str, name: str) -> tuple[PooledFlight, ...]:
    """The newest done result of each flight since the installation, in the order flown.

    Only accepted ones, none that is excluded, and each log once. A duplicate stands in for the first flight of its
    log while that has no result; not while it is excluded.

    Raises
    ------
    NotKept : no such aircraft.
    """
    since = one_aircraft(connection, owner, name).installation_from_utc
    first = flights.alias("first")
    wanted = (
        select(
            flights.c.flight_id,
            flights.c.log_sha256,
            flights.c.flown_utc,
            reductions.c.number,
            reductions.c.log_speed_scale,
            reductions.c.log_speed_scale_uncertainty,
            reductions.c.method,
            stale_of(reductions).label("stale"),
        )
        .select_from(flights)
        .join(
            reductions,
            and_(reductions.c.flight_id == flights.c.flight_id, reductions.c.number == flights.c.done_number),
        )
        .join(aircraft, and_(aircraft.c.owner == flights.c.owner, aircraft.c.name == flights.c.aircraft))
        .outerjoin(first, first.c.flight_id == flights.c.duplicate_of)
        .where(
            flights.c.owner == owner,
            flights.c.aircraft == name,
            flights.c.exclusion_reason.is_(None),
            reductions.c.verdict == ACCEPTED,
            reductions.c.log_speed_scale.is_not(None),
            reductions.c.log_speed_scale_uncertainty.is_not(None),
            or_(
                flights.c.duplicate_of.is_(None),
                and_(first.c.done_number.is_(None), first.c.exclusion_reason.is_(None)),
            ),
        )
        .order_by(flights.c.flown_utc, flights.c.flight_id)
    )
    if since is not None:
        wanted = wanted.where(flights.c.flown_utc >= since)
    by_log: dict[str, PooledFlight] = {}
    for row in connection.execute(wanted):
        by_log.setdefault(row.log_sha256, _pooled(row))
    return tuple(by_log.values())


def _pooled(row: Row[Any]) -> PooledFlight:
    values = {name: value for name, value in row._mapping.items() if name != "log_sha256"}
    return PooledFlight(**values | {"stale": bool(row.stale)})
