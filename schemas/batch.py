"""A JSON batch as it is published. The batch reader decodes and checks it itself, as arrays; both take their names from
the glossary.
"""

from marshmallow import RAISE, Schema, fields

from schemas.fields import Described, Instant
from schemas.settings import SettingsSchema
from service.domain.glossary import STREAMS

REQUIRED = {
    "probe": ("impact_pressure_pa",),
    "static": ("static_pressure_pa",),
    "temperature": ("air_temperature_k",),
    "gps": (),
    "attitude": (),
    "load_factor": ("load_factor",),
}
"""Columns that a stream needs beside `time_s`."""

VELOCITY = (("velocity_north_mps", "velocity_east_mps"), ("ground_speed_mps", "track_deg"))
"""Pairs of columns of which the GPS needs one."""

_ABOUT = {
    "probe": "The airspeed probe.",
    "static": "Static pressure; left out, it follows from the altitude and the standard atmosphere (flagged).",
    "temperature": "Outside air; left out, the standard atmosphere is taken (flagged, uncertainty carried).",
    "gps": "GPS velocity, as components or as speed and track.",
    "attitude": "Attitude of the aircraft.",
    "load_factor": "Normal load factor.",
}


class SampleColumn(Described):
    """A column of numbers. Times have no gaps; elsewhere null marks one."""

    def __init__(self, name: str, *, required: bool) -> None:
        items = {"type": "number" if name == "time_s" else ["number", "null"]}
        super().__init__(metadata={"type": "array", "items": items}, required=required, allow_none=not required)


class Stream(Schema):
    """A stream: columns of equal length."""

    class Meta:
        unknown = RAISE


def _stream(name: str) -> type[Schema]:
    about = {"title": "Batch" + name.title().replace("_", ""), "description": _ABOUT[name]}
    needed = ("time_s", *REQUIRED[name])
    columns = {column: SampleColumn(column, required=column in needed) for column in ("time_s", *STREAMS[name])}
    return type(f"{name}_stream", (Stream,), {"Meta": type("Meta", (Stream.Meta,), about), **columns})


class BatchSchema(Schema):
    class Meta:
        unknown = RAISE
        title = "Batch"
        description = "A flight as columns. Streams keep their own rates on one time axis in seconds."

    start_utc = Instant("The instant of time 0.", allow_none=True)
    probe = fields.Nested(_stream("probe"), required=True)
    static = fields.Nested(_stream("static"), allow_none=True)
    temperature = fields.Nested(_stream("temperature"), allow_none=True)
    gps = fields.Nested(_stream("gps"), required=True)
    attitude = fields.Nested(_stream("attitude"), allow_none=True)
    load_factor = fields.Nested(_stream("load_factor"), allow_none=True)
    settings = fields.Nested(SettingsSchema, allow_none=True)
