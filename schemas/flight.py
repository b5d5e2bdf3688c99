"""A kept flight on the wire: state, provenance, summary, parts, earlier reductions, lists of flights."""

from collections.abc import Iterable, Mapping
from typing import Any

from marshmallow import RAISE, Schema, ValidationError, fields

from schemas.fields import Answer, Code, Instant, Number, Text, pointers
from schemas.reduction import (
    AirspeedSchema,
    CalibrationSchema,
    CautionSchema,
    FaultSchema,
    LoiterSchema,
    MeanWindSchema,
    ReductionSchema,
    StallMarginsSchema,
    StallWarningSchema,
    VersionSchema,
)
from service.domain.codes import CAUTIONS, Verdict
from service.domain.errors import WrongValues
from service.domain.kept import FlightRecord, JobState, ReductionRecord

WIRE_STATES = ("queued", "running", "done", "failed")
LONGEST_REASON = 1000


def cautions() -> list[dict[str, str]]:
    """All of them, as every answer carries them."""
    return [{"code": code, "message": message} for code, message in CAUTIONS.items()]


def wire_state(state: JobState) -> str:
    """A cancelled job has failed, with the failure `cancelled`."""
    return str(JobState.FAILED if state is JobState.CANCELLED else state)


def _cautions_field() -> Any:
    return fields.List(fields.Nested(CautionSchema), metadata={"description": "Always all of them."})


def _whole(description: str, **more: Any) -> fields.Integer:
    return fields.Integer(metadata={"description": description, "minimum": 0}, **more)


class ExclusionSchema(Answer):
    class Meta:
        title = "Exclusion"
        description = "The flight is left out of the pool of its aircraft."

    reason = Text("Why.")
    since_utc = Instant("Since when.")


class ProvenanceSchema(Answer):
    class Meta:
        title = "Provenance"
        description = "Where the result comes from: the log, the settings, the method."

    log_sha256 = Text("SHA-256 of the log's bytes, after any content coding was removed.")
    log_bytes = _whole("Size of the log.")
    log_media_type = Text("Media type of the log, by its content.")
    log_deleted_utc = Instant("When the log went by age; null while it is kept.", allow_none=True)
    settings = fields.Dict(
        keys=fields.String(),
        metadata={"description": "Settings of the request; those of the aircraft's profile stand behind them."},
    )
    profile_version = _whole("Version of the aircraft whose profile was taken; null without one.", allow_none=True)
    method = Text("Version of the method; null until done.", allow_none=True)
    attempts = _whole("How often the reduction was begun.")
    requested_utc = Instant("When this reduction was asked for.")
    finished_utc = Instant("When it ended; null before.", allow_none=True)


class FlightStateSchema(Answer):
    class Meta:
        title = "FlightState"
        description = "A kept flight without its summary. State and failure are those of its latest reduction."

    flight = Text("Id of the flight.")
    aircraft = Text("Its aircraft; null without one.", allow_none=True)
    state = fields.String(
        metadata={"description": "State of the latest reduction.", "enum": list(WIRE_STATES)},
    )
    progress = Number("Share of the latest reduction that is done, 0 to 1.", at_least=0, at_most=1)
    failure = Text("Why it failed, `cancelled` if it was cancelled; else null.", allow_none=True)
    reduction = _whole("Number of the latest reduction, from 1.")
    result = _whole("Number of the newest reduction that is done, which is shown; null before.", allow_none=True)
    verdict = Code(Verdict, "Verdict of that result; null before.", allow_none=True)
    stale = fields.Boolean(
        metadata={"description": "Has the aircraft's profile changed since? Reduce the flight again."}
    )
    duplicate_of = Text("The first flight of this aircraft with the same log; it alone is pooled.", allow_none=True)
    exclusion = fields.Nested(
        ExclusionSchema, allow_none=True, metadata={"description": "Null unless it is left out of the pool."}
    )
    flown_utc = Instant("Start of the log where it is known, else when it was added.")
    created_utc = Instant("When the flight was added.")


class FlightSchema(FlightStateSchema):
    class Meta:
        title = "Flight"
        description = "A kept flight."

    provenance = fields.Nested(ProvenanceSchema, metadata={"description": "Of the result, or of what is to be one."})
    summary = fields.Nested(
        ReductionSchema,
        allow_none=True,
        metadata={"description": "The result without series; null before."},
    )
    cautions = _cautions_field()


class FlightsSchema(Answer):
    class Meta:
        title = "Flights"
        description = "A page of flights, the newest first."

    items = fields.List(fields.Nested(FlightStateSchema), metadata={"description": "Flights."})
    next = Text("Cursor of the next page; null on the last.", allow_none=True)
    cautions = _cautions_field()


class KeptReductionSchema(Answer):
    class Meta:
        title = "KeptReduction"
        description = "One reduction of a kept flight."

    flight = Text("Id of the flight.")
    number = _whole("1 for the first.")
    state = fields.String(metadata={"description": "Its state.", "enum": list(WIRE_STATES)})
    progress = Number("Share done, 0 to 1.", at_least=0, at_most=1)
    failure = Text("Why it failed; else null.", allow_none=True)
    verdict = Code(Verdict, "Null until done.", allow_none=True)
    stale = fields.Boolean(metadata={"description": "Has the aircraft's profile changed since?"})
    settings = fields.Dict(keys=fields.String(), metadata={"description": "Settings of the request."})
    profile_version = _whole("Version of the aircraft whose profile was taken.", allow_none=True)
    method = Text("Version of the method; null until done.", allow_none=True)
    requested_utc = Instant("When it was asked for.")
    finished_utc = Instant("When it ended; null before.", allow_none=True)
    summary = fields.Nested(
        ReductionSchema, allow_none=True, metadata={"description": "The result without series; null until done."}
    )
    cautions = _cautions_field()


class KeptReductionsSchema(Answer):
    class Meta:
        title = "KeptReductions"
        description = "Every reduction of a flight, by number."

    items = fields.List(fields.Nested(KeptReductionSchema), metadata={"description": "Reductions."})


class Part(Answer):
    """A part of a result."""

    flight = Text("Id of the flight.")
    reduction = _whole("Number of the reduction that it comes from.")
    stale = fields.Boolean(metadata={"description": "Has the aircraft's profile changed since?"})
    cautions = _cautions_field()
    version = fields.Nested(VersionSchema, metadata={"description": "What made the result."})


class CalibrationPartSchema(CalibrationSchema, Part):
    class Meta:
        title = "FlightCalibration"
        description = "The probe's scale from one flight."


class WindPartSchema(MeanWindSchema, Part):
    class Meta:
        title = "FlightWind"
        description = "The wind of one flight, and its loiters."

    loiters = fields.List(fields.Nested(LoiterSchema), metadata={"description": "Loiters and leg patterns."})


class FaultsPartSchema(Part):
    class Meta:
        title = "FlightFaults"
        description = "The faults of the sensors in one flight."

    faults = fields.List(fields.Nested(FaultSchema), metadata={"description": "Faults."})


class AirspeedPartSchema(AirspeedSchema, Part):
    class Meta:
        title = "FlightAirspeed"
        description = "The airspeed series of one flight, or a piece of it. Columns of equal length."


class StallMarginsPartSchema(StallMarginsSchema, Part):
    class Meta:
        title = "FlightStallMargins"
        description = "The stall margins of one flight, or a piece of them. Empty columns when there are none."

    stall_margins_absent = Text("Why there are no stall margins; null when there are.", allow_none=True)
    stall_warnings = fields.List(
        fields.Nested(StallWarningSchema), metadata={"description": "Spans of too small a margin, of the whole flight."}
    )


class ExclusionReasonSchema(Schema):
    class Meta:
        unknown = RAISE
        title = "ExclusionReason"
        description = "Why a flight is left out of the pool."

    error_messages = {"unknown": "is not known here", "type": "must be an object"}  # noqa: RUF012 - marshmallow's own way
    reason = Text("Why.", longest=LONGEST_REASON, required=True)


def load_exclusion_reason(document: object) -> str:
    """Raises WrongValues."""
    try:
        return str(ExclusionReasonSchema().load(document)["reason"])  # type: ignore[arg-type]
    except ValidationError as error:
        raise WrongValues("The exclusion is wrong.", pointers(error.messages)) from error


def dump_state(flight: FlightRecord) -> dict[str, Any]:
    """A flight as it stands in a list."""
    shown = flight.done or flight.latest
    excluded = {"reason": flight.exclusion_reason, "since_utc": flight.excluded_utc}
    state = {
        "flight": flight.flight_id,
        "aircraft": flight.aircraft,
        "state": wire_state(flight.latest.state),
        "progress": flight.latest.progress,
        "failure": flight.latest.failure,
        "reduction": flight.latest.number,
        "result": flight.done.number if flight.done else None,
        "verdict": Verdict(flight.done.verdict) if flight.done and flight.done.verdict else None,
        "stale": shown.stale,
        "duplicate_of": flight.duplicate_of,
        "exclusion": excluded if flight.exclusion_reason is not None else None,
        "flown_utc": flight.flown_utc,
        "created_utc": flight.created_utc,
    }
    dumped: dict[str, Any] = FlightStateSchema().dump(state)
    return dumped


def dump_flight(flight: FlightRecord) -> dict[str, Any]:
    """A flight with its provenance and summary. Summaries are kept as they are on the wire."""
    shown = flight.done or flight.latest
    return {
        **dump_state(flight),
        "provenance": _provenance(flight, shown),
        "summary": None if shown.summary is None else _without_fault_messages(shown.summary),
        "cautions": cautions(),
    }


def dump_answer(
    flight: FlightRecord, reduction: ReductionRecord, parts: Mapping[str, Any], *, fault_messages: bool = False
) -> dict[str, Any]:
    """The summary of one reduction with its flight beside it: the answer to the POST that asked for it.

    Parameters
    ----------
    parts : series to add, as `airspeed` and `stall_margins`.
    fault_messages : keep the findings in words.
    """
    ours = dump_state(flight) | {
        "state": wire_state(reduction.state),
        "progress": reduction.progress,
        "failure": reduction.failure,
        "reduction": reduction.number,
        "stale": reduction.stale,
        "result": reduction.number if reduction.summary is not None else None,
        "verdict": reduction.verdict,
        "cautions": cautions(),
    }
    summary = reduction.summary or {}
    return {**(summary if fault_messages else _without_fault_messages(summary)), **parts, **ours}


def dump_kept_reduction(reduction: ReductionRecord) -> dict[str, Any]:
    """One reduction of a flight, as a version."""
    return {
        "flight": reduction.flight_id,
        "number": reduction.number,
        "state": wire_state(reduction.state),
        "progress": reduction.progress,
        "failure": reduction.failure,
        "verdict": reduction.verdict,
        "stale": reduction.stale,
        "settings": reduction.settings,
        "profile_version": reduction.profile_version,
        "method": reduction.method,
        "requested_utc": _instant(reduction.created_utc),
        "finished_utc": _instant(reduction.finished_utc),
        "summary": None if reduction.summary is None else _without_fault_messages(reduction.summary),
        "cautions": cautions(),
    }


def dump_flights(flights: Iterable[FlightRecord], next_cursor: str | None) -> dict[str, Any]:
    """A page of flights."""
    return {"items": [dump_state(flight) for flight in flights], "next": next_cursor, "cautions": cautions()}


def dump_part(reduction: ReductionRecord, content: Mapping[str, Any]) -> dict[str, Any]:
    """A part of a result, taken from its summary or its series."""
    return {
        **content,
        "flight": reduction.flight_id,
        "reduction": reduction.number,
        "stale": reduction.stale,
        "cautions": cautions(),
        "version": (reduction.summary or {}).get("version"),
    }


def _provenance(flight: FlightRecord, reduction: ReductionRecord) -> dict[str, Any]:
    record = {
        "log_sha256": flight.log_sha256,
        "log_bytes": flight.log_bytes,
        "log_media_type": flight.log_media_type,
        "log_deleted_utc": flight.log_deleted_utc,
        "settings": dict(reduction.settings),
        "profile_version": reduction.profile_version,
        "method": reduction.method,
        "attempts": reduction.attempts,
        "requested_utc": reduction.created_utc,
        "finished_utc": reduction.finished_utc,
    }
    dumped: dict[str, Any] = ProvenanceSchema().dump(record)
    return dumped


def _instant(moment: Any) -> Any:
    return Instant("")._serialize(moment, None, None)


def _without_fault_messages(summary: Mapping[str, Any]) -> dict[str, Any]:
    """As in a summary without `include=faults`."""
    faults = [
        {name: value for name, value in fault.items() if name != "message"} for fault in summary.get("faults", [])
    ]
    return {**summary, "faults": faults} if "faults" in summary else dict(summary)


ALL_FLIGHT_SCHEMAS: tuple[type[Schema], ...] = (
    FlightSchema,
    FlightsSchema,
    KeptReductionSchema,
    KeptReductionsSchema,
    CalibrationPartSchema,
    WindPartSchema,
    AirspeedPartSchema,
    StallMarginsPartSchema,
    FaultsPartSchema,
    ExclusionReasonSchema,
)
