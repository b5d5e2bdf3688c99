"""The settings of a request: JSON -> `service.domain.settings.Settings`; all optional, nothing unknown passes."""

import re
from itertools import pairwise
from typing import Any

from marshmallow import RAISE, Schema, ValidationError, fields, post_load, validates_schema

from schemas.fields import Number, Text, pointers
from service.domain.errors import WrongValues
from service.domain.settings import (
    Aircraft,
    ColumnMeaning,
    Configuration,
    ConfigurationTime,
    ProbeSettings,
    Settings,
    WarningSettings,
    Window,
)

MOST_ENTRIES = 1000
LATEST_S = 1e11
"""Seconds since 1970 fit with room to spare; beyond it sums of times lose their digits."""


def listed(schema: type[Schema], description: str) -> Any:
    """A bounded list of `schema`."""
    metadata = {"description": description, "maxItems": MOST_ENTRIES}
    return BoundedList(fields.Nested(schema), metadata=metadata)


class BoundedList(fields.List[Any]):
    """A list whose length is checked first: reading a million entries only to refuse them takes a minute."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> list[Any]:
        _refuse_too_many(value)
        return super()._deserialize(value, attr, data, **kwargs)


class BoundedDict(fields.Dict):
    """A mapping whose length is checked first."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        _refuse_too_many(value)
        return super()._deserialize(value, attr, data, **kwargs)  # type: ignore[no-untyped-call]


def _refuse_too_many(entries: object) -> None:
    if isinstance(entries, list | dict) and len(entries) > MOST_ENTRIES:
        raise ValidationError(f"must have at most {MOST_ENTRIES} entries")


class Strict(Schema):
    class Meta:
        unknown = RAISE

    error_messages = {"unknown": "is not known here", "type": "must be an object"}  # noqa: RUF012 - marshmallow's own way


class ConfigurationSchema(Strict):
    class Meta(Strict.Meta):
        title = "Configuration"
        description = (
            "One configuration of the aircraft. Its stall speed is given, or follows from wing area and maximum lift "
            "coefficient; without either there are no stall margins."
        )

    name = Text("Name, used in `configuration_times` and warnings.", longest=64, required=True)
    stall_speed_mps = Number(
        "CAS of the stall at 1 g and the reference mass [m/s].", above=0, at_most=340, allow_none=True
    )
    stall_speed_uncertainty_mps = Number(at_least=0, at_most=340, allow_none=True)
    wing_area_m2 = Number(above=0, at_most=1e4, allow_none=True)
    lift_coefficient_max = Number(above=0, at_most=10, allow_none=True)

    @validates_schema
    def one_way(self, data: dict[str, Any], **_kwargs: Any) -> None:
        area, lift = data.get("wing_area_m2"), data.get("lift_coefficient_max")
        if (area is None) != (lift is None):
            missing = "lift_coefficient_max" if lift is None else "wing_area_m2"
            raise ValidationError("wing_area_m2 and lift_coefficient_max are given together", missing)
        if area is not None and data.get("stall_speed_mps") is not None:
            raise ValidationError("give either stall_speed_mps or wing_area_m2 with lift_coefficient_max")

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> Configuration:
        return Configuration(**data)


class AircraftSchema(Strict):
    class Meta(Strict.Meta):
        title = "AircraftSettings"
        description = "The aircraft, as far as its stall speed depends on it."

    reference_mass_kg = Number(above=0, at_most=1e6, allow_none=True)
    mass_kg = Number(above=0, at_most=1e6, allow_none=True)
    mass_uncertainty_kg = Number(at_least=0, at_most=1e6, allow_none=True)
    maximum_bank_deg = Number(above=0, at_most=89, allow_none=True)
    configurations = listed(ConfigurationSchema, "Configurations; the first is in force until another is named.")

    @validates_schema
    def names_differ(self, data: dict[str, Any], **_kwargs: Any) -> None:
        names = [entry.name for entry in data.get("configurations", ())]
        repeated = {index: ["is given twice"] for index, name in enumerate(names) if name in names[:index]}
        if repeated:
            raise ValidationError({"configurations": {index: {"name": text} for index, text in repeated.items()}})

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> Aircraft:
        return Aircraft(**data | {"configurations": tuple(data.get("configurations", ()))})


class ConfigurationTimeSchema(Strict):
    class Meta(Strict.Meta):
        title = "ConfigurationTime"
        description = "From `start_s` on the named configuration is in force."

    start_s = Number(at_least=-LATEST_S, at_most=LATEST_S, required=True)
    name = Text("A name of `aircraft.configurations`.", longest=64, required=True)

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> ConfigurationTime:
        return ConfigurationTime(**data)


class ProbeSettingsSchema(Strict):
    class Meta(Strict.Meta):
        title = "ProbeSettings"
        description = "What is known of the probe."

    zero_offset_pa = Number(at_least=-1e5, at_most=1e5, allow_none=True)
    zero_offset_uncertainty_pa = Number(
        "Standard uncertainty of the zero offset, given or not [Pa].", at_least=0, at_most=1e5, allow_none=True
    )
    applied_speed_scale = Number(above=0, at_most=100)
    nominal_pressure_scale = Number(
        "Design value of the pressure scale: 0.1 to 0.5 for a venturi probe, else 1.",
        above=0,
        at_most=100,
    )
    full_scale_pa = Number(above=0, at_most=1e6, allow_none=True)

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> ProbeSettings:
        return ProbeSettings(**data)


class WindowSchema(Strict):
    class Meta(Strict.Meta):
        title = "Window"
        description = "A span of time in which the aircraft circled or flew a pattern of legs."

    start_s = Number(at_least=-LATEST_S, at_most=LATEST_S, required=True)
    end_s = Number(at_least=-LATEST_S, at_most=LATEST_S, required=True)

    @validates_schema
    def ordered(self, data: dict[str, Any], **_kwargs: Any) -> None:
        if data["end_s"] <= data["start_s"]:
            raise ValidationError("must be after start_s", "end_s")

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> Window:
        return Window(**data)


class WarningSettingsSchema(Strict):
    class Meta(Strict.Meta):
        title = "WarningSettings"
        description = "Stall margins (CAS / stall speed - 1) below which a level is raised."

    caution_below = Number(at_least=0, at_most=10)
    warning_below = Number(
        "Stall margin below which a warning is given; not above `caution_below`.", at_least=0, at_most=10
    )
    hold_s = Number(at_least=0, at_most=60)

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> WarningSettings:
        made = WarningSettings(**data)
        if made.warning_below > made.caution_below:
            raise ValidationError(f"must not be above caution_below ({made.caution_below:g})", "warning_below")
        return made


class ColumnMeaningSchema(Strict):
    class Meta(Strict.Meta):
        title = "ColumnMeaning"
        description = "What a column of a foreign CSV holds."

    quantity = Text(
        "A quantity of the batch, e.g. `impact_pressure_pa` (the unit's suffix may be left out).",
        longest=64,
        required=True,
    )
    unit = Text("The unit it is written in, e.g. `kt`, `km/h`, `hPa`, `inH2O`, `degC`.", longest=32, allow_none=True)

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> ColumnMeaning:
        return ColumnMeaning(**data)


class SettingsSchema(Strict):
    class Meta(Strict.Meta):
        title = "Settings"
        description = "What the user knows about a flight. Everything is optional."

    aircraft = fields.Nested(AircraftSchema)
    configuration_times = listed(
        ConfigurationTimeSchema, "Changes of configuration; of two at the same time the later entry counts."
    )
    probe = fields.Nested(ProbeSettingsSchema)
    loiters = listed(WindowSchema, "Where to look for circles or legs; without it they are found.")
    warnings = fields.Nested(WarningSettingsSchema)
    columns = BoundedDict(
        keys=Text("Name of a column in the CSV's header.", longest=200),
        values=fields.Nested(ColumnMeaningSchema),
        metadata={
            "description": "For a CSV with names of its own: column -> quantity and unit.",
            "maxProperties": MOST_ENTRIES,
        },
    )

    @validates_schema
    def configurations_known(self, data: dict[str, Any], **_kwargs: Any) -> None:
        known = {entry.name for entry in data.get("aircraft", Aircraft()).configurations}
        errors = {
            index: {"name": ["is no name of aircraft.configurations"]}
            for index, entry in enumerate(data.get("configuration_times", []))
            if entry.name not in known
        }
        if errors:
            raise ValidationError({"configuration_times": errors})

    @validates_schema
    def windows_apart(self, data: dict[str, Any], **_kwargs: Any) -> None:
        windows = data.get("loiters", [])
        order = sorted(range(len(windows)), key=lambda index: windows[index].start_s)
        late = [after for before, after in pairwise(order) if windows[after].start_s < windows[before].end_s]
        if late:
            raise ValidationError({"loiters": {index: {"start_s": ["overlaps another window"]} for index in late}})

    @post_load
    def build(self, data: dict[str, Any], **_kwargs: Any) -> Settings:
        tuples: dict[str, Any] = {
            name: tuple(data[name]) for name in ("configuration_times", "loiters") if name in data
        }
        return Settings(**data | tuples)


def load_settings(document: object, at: str = "") -> Settings:
    """Settings from decoded JSON.

    Parameters
    ----------
    document : decoded JSON; None gives the defaults.
    at : JSON Pointer of the document within what the client sent, put before every pointer of an error.

    Raises
    ------
    WrongValues : with JSON Pointer -> message for every fault found.
    """
    if document is None:
        return Settings()
    try:
        settings: Settings = SettingsSchema().load(document)  # type: ignore[arg-type]
    except ValidationError as error:
        found = {_without_dict_level(at + pointer): text for pointer, text in pointers(error.messages).items()}
        raise WrongValues("The settings are wrong.", found) from error
    return settings


def _without_dict_level(pointer: str) -> str:
    """Marshmallow puts `key` or `value` between a mapping's entry and its message."""
    return re.sub(r"(/columns/[^/]+)/(?:key|value)(?=/|$)", r"\1", pointer)
