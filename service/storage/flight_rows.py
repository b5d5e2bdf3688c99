"""From rows to records: a flight with its latest reduction and its newest that is done."""

from dataclasses import fields
from typing import Any

from sqlalchemy import Connection, FromClause, RowMapping, Select, and_, func, null, select
from sqlalchemy.sql import ColumnElement

from service.domain.kept import FlightRecord, JobState, ReductionRecord
from service.storage.errors import NotKept
from service.storage.identifiers import is_flight_id
from service.storage.tables import aircraft, flights, reductions

NO_FLIGHT = "There is no such flight."

latest = reductions.alias("latest")
done = reductions.alias("done")

REDUCTION_COLUMNS = tuple(field.name for field in fields(ReductionRecord) if field.name != "stale")
FLIGHT_COLUMNS = tuple(field.name for field in fields(FlightRecord) if field.name not in ("latest", "done"))


def stale_of(reduction: FromClause) -> ColumnElement[bool]:
    """Whether the aircraft's profile is newer than the one that the reduction took. False without an aircraft."""
    taken = func.coalesce(reduction.c.profile_version, 0)
    return func.coalesce(aircraft.c.profile_version, 0) > taken


def select_flights(owner: str, *, summaries: bool = True) -> Select[Any]:
    """Flights of an owner, each with its reductions; without `summaries` those are None."""
    done_is_another = flights.c.done_number != flights.c.latest_number
    joined = (
        flights.join(
            latest, and_(latest.c.flight_id == flights.c.flight_id, latest.c.number == flights.c.latest_number)
        )
        .outerjoin(
            done,
            and_(done.c.flight_id == flights.c.flight_id, done.c.number == flights.c.done_number, done_is_another),
        )
        .outerjoin(aircraft, and_(aircraft.c.owner == flights.c.owner, aircraft.c.name == flights.c.aircraft))
    )
    return (
        select(
            *(flights.c[name].label(f"flight_{name}") for name in (*FLIGHT_COLUMNS, "done_number")),
            *_reduction_columns(latest, summaries),
            *_reduction_columns(done, summaries),
        )
        .select_from(joined)
        .where(flights.c.owner == owner)
    )


def select_reductions(owner: str, flight_id: str) -> Select[Any]:
    """Reductions of one flight."""
    joined = reductions.join(flights).outerjoin(
        aircraft, and_(aircraft.c.owner == flights.c.owner, aircraft.c.name == flights.c.aircraft)
    )
    chosen = (reductions.c[name].label(f"reductions_{name}") for name in REDUCTION_COLUMNS)
    return (
        select(*chosen, stale_of(reductions).label("reductions_stale"))
        .select_from(joined)
        .where(flights.c.owner == owner, flights.c.flight_id == flight_id)
    )


def flight_of(row: RowMapping) -> FlightRecord:
    newest = reduction_of(row, "latest")
    finished = newest if row["flight_done_number"] == newest.number else None
    if finished is None and row["flight_done_number"] is not None:
        finished = reduction_of(row, "done")
    return FlightRecord(**{name: row[f"flight_{name}"] for name in FLIGHT_COLUMNS}, latest=newest, done=finished)


def reduction_of(row: RowMapping, prefix: str) -> ReductionRecord:
    values = {name: row[f"{prefix}_{name}"] for name in (*REDUCTION_COLUMNS, "stale")}
    return ReductionRecord(**values | {"state": JobState(values["state"]), "stale": bool(values["stale"])})


def one_flight(connection: Connection, owner: str, flight_id: str) -> FlightRecord:
    """Raises NotKept."""
    check_flight_id(flight_id)
    row = connection.execute(select_flights(owner).where(flights.c.flight_id == flight_id)).one_or_none()
    if row is None:
        raise NotKept(NO_FLIGHT)
    return flight_of(row._mapping)


def one_reduction(connection: Connection, owner: str, flight_id: str, number: int) -> ReductionRecord:
    """Raises NotKept."""
    check_flight_id(flight_id)
    # a number beyond the column's would be an error of the database
    wanted = select_reductions(owner, flight_id).where(reductions.c.number == min(max(number, 0), 2**31 - 1))
    row = connection.execute(wanted).one_or_none()
    if row is None:
        raise NotKept("This flight has no such reduction.")
    return reduction_of(row._mapping, "reductions")


def check_flight_id(flight_id: str) -> None:
    """Raises NotKept for what cannot be one."""
    if not is_flight_id(flight_id):
        raise NotKept(NO_FLIGHT)


def _reduction_columns(table: FromClause, summaries: bool) -> list[ColumnElement[Any]]:
    chosen: list[ColumnElement[Any]] = []
    for name in REDUCTION_COLUMNS:
        column = table.c[name] if summaries or name != "summary" else null()
        chosen.append(column.label(f"{table.description}_{name}"))
    return [*chosen, stale_of(table).label(f"{table.description}_stale")]
