"""Aircraft: their profiles, and since when the probe is installed as it is."""

from collections.abc import Mapping
from dataclasses import fields
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Engine, select, update

from service.domain.kept import AircraftRecord
from service.storage.audit import Action, note
from service.storage.clock import utc_now
from service.storage.engine import reading, writing
from service.storage.errors import NotKept, VersionConflict
from service.storage.pages import Page, checked_limit, page_of, read_cursor, write_cursor
from service.storage.tables import aircraft
from service.storage.texts import aircraft_name, is_name
from service.storage.upsert import insert_if_absent

CURSOR = "aircraft"
NO_AIRCRAFT = "There is no such aircraft."
COLUMNS = tuple(field.name for field in fields(AircraftRecord))


class AircraftStore:
    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def put(
        self,
        owner: str,
        name: str,
        profile: Mapping[str, Any],
        *,
        expected: int | None = None,
        by: str | None = None,
    ) -> tuple[AircraftRecord, bool]:
        """Set the profile; (the aircraft, whether it is new). The version stays when the profile is what it was.

        `expected` is the version that is to be replaced: None any or none, 0 none (the aircraft must not exist).

        Raises
        ------
        WrongValues : the name cannot be used.
        VersionConflict : the version is another.
        """
        aircraft_name(name)
        with writing(self._engine) as connection:
            created = not expected and create_if_absent(connection, owner, name, by, profile)
            if created:
                return one_aircraft(connection, owner, name), True
            found = _locked(connection, owner, name)
            _expect(expected, found)
            if found is None:
                raise NotKept(NO_AIRCRAFT)
            if found.profile != profile:
                version = found.version + 1
                _change(connection, owner, name, profile=profile, version=version, profile_version=version)
                note(connection, owner, by, Action.AIRCRAFT_CHANGED, name, {"version": version})
            return one_aircraft(connection, owner, name), False

    def get(self, owner: str, name: str) -> AircraftRecord:
        """Raises NotKept."""
        with reading(self._engine) as connection:
            return one_aircraft(connection, owner, name)

    def list(self, owner: str, *, cursor: str | None = None, limit: int = 50) -> Page[AircraftRecord]:
        """A page of aircraft by name (in the order of its bytes). Raises WrongValues for cursor or limit."""
        count = checked_limit(limit)
        wanted = _select().where(aircraft.c.owner == owner)
        if cursor is not None:
            wanted = wanted.where(aircraft.c.name > read_cursor(CURSOR, cursor, is_name))
        with reading(self._engine) as connection:
            rows = connection.execute(wanted.order_by(aircraft.c.name).limit(count + 1)).all()
        return page_of(
            [AircraftRecord(**row._mapping) for row in rows], count, lambda last: write_cursor(CURSOR, last.name)
        )

    def set_installation(
        self,
        owner: str,
        name: str,
        from_utc: datetime,
        *,
        expected: int | None = None,
        by: str | None = None,
    ) -> AircraftRecord:
        """The probe flies as installed now since `from_utc`: a new pool begins. Results stay as they are, none is
        stale.

        Raises
        ------
        NotKept, VersionConflict
        """
        with writing(self._engine) as connection:
            found = _locked(connection, owner, name)
            if found is None:
                raise NotKept(NO_AIRCRAFT)
            _expect(expected, found)
            if found.installation_from_utc != from_utc:
                _change(connection, owner, name, installation_from_utc=from_utc, version=found.version + 1)
                note(connection, owner, by, Action.INSTALLATION_CHANGED, name, {"from_utc": from_utc.isoformat()})
            return one_aircraft(connection, owner, name)


def create_if_absent(
    connection: Connection, owner: str, name: str, by: str | None, profile: Mapping[str, Any] | None = None
) -> bool:
    """A new aircraft unless there is one; whether it was created."""
    values = {
        "owner": owner,
        "name": name,
        "profile": profile or {},
        "version": 1,
        "profile_version": 1,
        "created_utc": utc_now(),
    }
    created = insert_if_absent(connection, aircraft, values)
    if created:
        note(connection, owner, by, Action.AIRCRAFT_CHANGED, name, {"version": 1})
    return created


def one_aircraft(connection: Connection, owner: str, name: str) -> AircraftRecord:
    """Raises NotKept."""
    found = _find(connection, owner, name)
    if found is None:
        raise NotKept(NO_AIRCRAFT)
    return found


def _select() -> Any:
    return select(*(aircraft.c[column] for column in COLUMNS))


def _find(connection: Connection, owner: str, name: str, *, lock: bool = False) -> AircraftRecord | None:
    if not is_name(name):
        return None
    wanted = _select().where(aircraft.c.owner == owner, aircraft.c.name == name)
    row = connection.execute(wanted.with_for_update() if lock else wanted).one_or_none()
    return None if row is None else AircraftRecord(**row._mapping)


def _locked(connection: Connection, owner: str, name: str) -> AircraftRecord | None:
    return _find(connection, owner, name, lock=True)


def _expect(expected: int | None, found: AircraftRecord | None) -> None:
    version = None if found is None else found.version
    if expected is not None and expected != (version or 0):
        raise VersionConflict("The aircraft has been changed in the meantime.", expected, version)


def _change(connection: Connection, owner: str, name: str, **values: Any) -> None:
    connection.execute(update(aircraft).where(aircraft.c.owner == owner, aircraft.c.name == name).values(**values))
