"""An aircraft on the wire: the settings that all its flights share, and since when its probe is installed as it is."""

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from typing import Any

from marshmallow import Schema, ValidationError, fields

from schemas.fields import Answer, Instant, Text, pointers
from schemas.settings import AircraftSchema, ProbeSettingsSchema, Strict, WarningSettingsSchema
from service.domain.errors import WrongValues
from service.domain.kept import AircraftRecord

OURS = ("name", "version", "installation_from_utc", "created_utc")
"""Fields that we write: taken back unread, so that what GET gave can be changed and PUT."""


class ProfileSchema(Strict):
    class Meta(Strict.Meta):
        title = "AircraftProfile"
        description = (
            "Settings that all flights of an aircraft share. Settings of a flight are put over them, field by field."
        )

    aircraft = fields.Nested(AircraftSchema)
    probe = fields.Nested(ProbeSettingsSchema)
    warnings = fields.Nested(WarningSettingsSchema)


class AircraftResourceSchema(Answer):
    class Meta:
        title = "Aircraft"
        description = "A kept aircraft: its profile and what we know beside it."

    sometimes = ("aircraft", "probe", "warnings")

    name = Text("Its name, as in the path.")
    version = fields.Integer(metadata={"description": "Grows with every change; the ETag.", "minimum": 1})
    installation_from_utc = Instant(
        "Flights flown before belong to an earlier installation of the probe and are out of the pool; null: none are.",
        allow_none=True,
    )
    created_utc = Instant("When it was first named.")
    aircraft = fields.Nested(AircraftSchema)
    probe = fields.Nested(ProbeSettingsSchema)
    warnings = fields.Nested(WarningSettingsSchema)


class AircraftListSchema(Answer):
    class Meta:
        title = "AircraftList"
        description = "A page of aircraft, by name."

    items = fields.List(fields.Nested(AircraftResourceSchema), metadata={"description": "Aircraft."})
    next = Text("Cursor of the next page; null on the last.", allow_none=True)


class InstallationSchema(Strict):
    class Meta(Strict.Meta):
        title = "Installation"
        description = "Since when the probe is installed as it is now."

    from_utc = fields.String(
        required=True,
        metadata={"description": "An instant in RFC 3339, with `Z` or an offset.", "format": "date-time"},
    )


def load_profile(document: object) -> dict[str, Any]:
    """The profile as it was sent, once it is found right.

    Raises
    ------
    WrongValues : with JSON Pointer -> message.
    """
    if not isinstance(document, dict):
        raise WrongValues("The profile is wrong.", {"": "must be an object"})
    profile = {name: value for name, value in document.items() if name not in OURS}
    try:
        ProfileSchema().load(profile)
    except ValidationError as error:
        raise WrongValues("The profile is wrong.", pointers(error.messages)) from error
    return profile


def load_installation(document: object) -> datetime:
    """Raises WrongValues."""
    try:
        given = InstallationSchema().load(document)["from_utc"]  # type: ignore[arg-type]
    except ValidationError as error:
        raise WrongValues("The installation is wrong.", pointers(error.messages)) from error
    return instant(given, "/from_utc")


def instant(text: str, pointer: str) -> datetime:
    """An instant of RFC 3339 in UTC. Raises WrongValues at `pointer`; a time without zone is none."""
    try:
        moment = datetime.fromisoformat(text.strip().replace(" ", "+"))
        if moment.tzinfo is not None:
            return moment.astimezone(UTC)
    except (ValueError, OverflowError):
        pass
    raise WrongValues("A time is wrong.", {pointer: "must be an instant such as 2026-05-04T09:12:00Z"})


def over_profile(profile: Mapping[str, Any], settings: Mapping[str, Any]) -> dict[str, Any]:
    """Settings of a flight over those of its aircraft, field by field. A null takes the place of a value."""
    merged = dict(profile)
    for name, value in settings.items():
        behind = merged.get(name)
        both = isinstance(behind, Mapping) and isinstance(value, Mapping) and name != "columns"
        merged[name] = {**behind, **value} if both else value  # type: ignore[dict-item]
    return merged


def dump_aircraft(record: AircraftRecord) -> dict[str, Any]:
    """An aircraft as GET gives it."""
    dates = AircraftResourceSchema(only=OURS).dump(record)
    return {**record.profile, **dates}


def dump_aircraft_list(records: Iterable[AircraftRecord], next_cursor: str | None) -> dict[str, Any]:
    return {"items": [dump_aircraft(record) for record in records], "next": next_cursor}


ALL_AIRCRAFT_SCHEMAS: tuple[type[Schema], ...] = (
    ProfileSchema,
    AircraftResourceSchema,
    AircraftListSchema,
    InstallationSchema,
)
