"""The answer: `service.domain.results.Reduction` -> JSON."""

from collections.abc import Collection
from typing import Any

from marshmallow import Schema, fields, pre_dump

from schemas.fields import Answer, Code, Column, EstimateField, FlagColumn, Instant, Number, Text
from service.domain.codes import (
    CAUTIONS,
    Direction,
    FaultKind,
    Level,
    LogFormat,
    Reason,
    Verdict,
    ZeroOffsetSource,
)
from service.domain.results import Reduction
from service.version import METHOD, SERVICE


def _nested(schema: type[Schema], description: str, **kwargs: Any) -> fields.Nested:
    return fields.Nested(schema, metadata={"description": description}, **kwargs)


def _listed(schema: type[Schema], description: str, **kwargs: Any) -> Any:
    return fields.List(fields.Nested(schema), metadata={"description": description}, **kwargs)


class ReasonSchema(Answer):
    class Meta:
        title = "Reason"
        description = "Why a verdict is what it is; beside `accepted` it is a remark."

    code = Code(Reason, "Code of a closed list.")
    message = Text("The reason in words.")


class CalibrationSchema(Answer):
    class Meta:
        title = "Calibration"
        description = "The probe's scale. Estimates are null when the verdict is `refused`."

    verdict = Code(Verdict, "May the factor be used?")
    reasons = _listed(ReasonSchema, "Why.")
    speed_scale = EstimateField()
    pressure_scale = EstimateField()
    total_speed_scale = EstimateField()
    accepted_half_width = Number()
    zero_offset_pa = EstimateField()
    zero_offset_source = Code(ZeroOffsetSource, "Where the zero offset comes from.")
    gps_delay_s = EstimateField()
    airspeed_range_mps = fields.List(
        Number("CAS."),
        allow_none=True,
        metadata={"description": "CAS of the fitted data, slowest and fastest.", "minItems": 2, "maxItems": 2},
    )
    gust_mps = Number(allow_none=True)
    residual_rms_mps = Number(allow_none=True)


class WindSchema(Answer):
    """Dumps a `LoiterWind`, or a whole `Reduction` through `MeanWindSchema`: both hold `wind`, which may be None."""

    north_mps = EstimateField(attribute="wind.north_mps")
    east_mps = EstimateField(attribute="wind.east_mps")
    speed_mps = EstimateField(attribute="wind.speed_mps")
    from_deg = EstimateField(
        "Direction that the wind blows from, clockwise from true north [deg]; null when its "
        "uncertainty makes it meaningless.",
        attribute="wind.from_deg",
    )


class LoiterWindSchema(WindSchema):
    class Meta:
        title = "LoiterWind"
        description = "The mean wind of one loiter, over its time and path."

    loiter = fields.Integer(metadata={"description": "Index into `loiters`."})
    altitude_m = Number(allow_none=True)


class MeanWindSchema(WindSchema):
    class Meta:
        title = "Wind"
        description = "Time-weighted mean over the used loiters; components null when refused."

    by_loiter = _listed(LoiterWindSchema, "One entry per loiter that was fitted.", attribute="wind_by_loiter")


class LoiterSchema(Answer):
    class Meta:
        title = "Loiter"
        description = "A span of flight that serves the fit: circles one way round, or a pattern of straight legs."

    start_s = Number(allow_none=True)
    end_s = Number(allow_none=True)
    turns = Number(allow_none=True)
    direction = Code(Direction, "Which way round.")
    heading_coverage_deg = Number(allow_none=True)
    true_airspeed_mps = Number(allow_none=True)
    used = fields.Boolean(metadata={"description": "Does the fit use it?"})


class AirspeedSchema(Answer):
    class Meta:
        title = "AirspeedSeries"
        description = "Airspeeds at the probe's own times; columns of equal length, null where missing."

    time_s = Column(decimals=None)
    indicated_mps = Column()
    calibrated_mps = Column()
    equivalent_mps = Column()
    true_mps = Column()
    calibrated_standard_uncertainty_mps = Column()
    true_standard_uncertainty_mps = Column()
    flags = FlagColumn("Flags of each sample.")


class StallMarginsSchema(Answer):
    class Meta:
        title = "StallMarginSeries"
        description = "CAS / stall speed - 1 at the probe's own times; null on the ground and while refused."

    time_s = Column(decimals=None)
    load_factor = Column()
    stall_speed_mps = Column()
    margin = Column()
    margin_lower_95 = Column()
    indicated_margin = Column()
    flags = FlagColumn("Flags of each sample.")


class StallWarningSchema(Answer):
    class Meta:
        title = "StallWarning"
        description = "A span in which the margin was below a threshold. Advisory."

    level = Code(Level, "Caution is amber, warning is red.")
    start_s = Number(allow_none=True)
    end_s = Number(allow_none=True)
    minimum_margin = Number(allow_none=True)
    minimum_margin_lower_95 = Number(allow_none=True)
    indicated_margin = Number(allow_none=True)
    load_factor = Number(allow_none=True)
    configuration = Text("Configuration in force.")
    message = Text("The warning in words.")


class FaultSchema(Answer):
    class Meta:
        title = "Fault"
        description = "A fault of a sensor and its span."

    sometimes = ("message",)

    fault = Code(FaultKind, "Kind.")
    sensor = Text("Which sensor.")
    start_s = Number(allow_none=True)
    end_s = Number(allow_none=True)
    message = Text("The finding in words; only with `include=faults`.")


class SensorSchema(Answer):
    class Meta:
        title = "Sensor"
        description = "One instance of a sensor in the log: was it chosen, and why."

    sensor = Text("Which quantity it measures.")
    instance = fields.Integer(metadata={"description": "Number of the instance in the log."})
    samples = fields.Integer(metadata={"description": "Samples found."})
    chosen = fields.Boolean(metadata={"description": "Is it the one used?"})
    dead = fields.Boolean(metadata={"description": "Does it never move?"})
    reason = Text("Why it was chosen or not.")
    start_s = Number(allow_none=True)
    end_s = Number(allow_none=True)


class InputsSchema(Answer):
    class Meta:
        title = "Inputs"
        description = "What was read."

    format = Code(LogFormat, "Format found.")
    start_utc = Instant("The instant of time 0; null when unknown.", allow_none=True)
    duration_s = Number(allow_none=True)
    samples = fields.Dict(
        keys=fields.String(),
        values=fields.Integer(),
        metadata={"description": "Samples per stream."},
    )
    truncated = fields.Boolean(metadata={"description": "Did the log end early?"})
    sha256 = Text("SHA-256 of the log's bytes, after any content coding was removed.")
    probe_source = Text("Where the impact pressure comes from.", allow_none=True)
    static_source = Text("Where the static pressure comes from.", allow_none=True)
    temperature_source = Text("Where the air temperature comes from.", allow_none=True)
    load_factor_source = Text("Where the load factor comes from.", allow_none=True)
    sensors = _listed(SensorSchema, "Every instance met.")


class CautionSchema(Answer):
    class Meta:
        title = "Caution"
        description = "What every user of the answer must know."

    code = Text("Code of a closed list.", one_of=CAUTIONS)
    message = Text("The caution in words.")


class VersionSchema(Answer):
    class Meta:
        title = "Version"
        description = "What made the answer."

    service = Text("Release of the service.")
    method = Text("Version of the method.")


class ReductionSchema(Answer):
    """Dumps a `Reduction`. Series stay numpy arrays: `service.http.answers.encode` writes them."""

    class Meta:
        title = "Reduction"
        description = "The whole answer about one flight."

    sometimes = ("airspeed", "stall_margins")

    calibration = _nested(CalibrationSchema, "Scale of the probe and the verdict.")
    wind = _nested(MeanWindSchema, "Mean wind.")
    loiters = _listed(LoiterSchema, "Loiters and leg patterns found or given.")
    airspeed = _nested(AirspeedSchema, "Only with `include=airspeed`; null without a probe.", allow_none=True)
    stall_margins = _nested(
        StallMarginsSchema, "Only with `include=stall_margins`; null without a stall speed.", allow_none=True
    )
    stall_margins_absent = Text("Why there are no stall margins; null when there are.", allow_none=True)
    stall_warnings = _listed(StallWarningSchema, "Spans of too small a margin.")
    faults = _listed(FaultSchema, "Faults of the sensors.")
    inputs = _nested(InputsSchema, "What was read.")
    cautions = _listed(CautionSchema, "Always all of them.")
    version = _nested(VersionSchema, "What made the answer.")

    @pre_dump
    def with_constants(self, reduction: Reduction, **_kwargs: Any) -> dict[str, Any]:
        answer = {name: getattr(reduction, name) for name in Reduction.__dataclass_fields__}
        answer["wind"] = {"wind": reduction.wind, "wind_by_loiter": reduction.wind_by_loiter}
        answer["cautions"] = [{"code": code, "message": message} for code, message in CAUTIONS.items()]
        answer["version"] = {"service": SERVICE, "method": METHOD}
        return answer


def dump_reduction(reduction: Reduction, include: Collection[str] = ()) -> dict[str, Any]:
    """The answer as it goes to the encoder.

    Parameters
    ----------
    reduction : the result.
    include : names of `PARTS`; without them the summary alone.
    """
    left_out = {"airspeed", "stall_margins"} - set(include)
    if "faults" not in include:
        left_out.add("faults.message")
    answer: dict[str, Any] = ReductionSchema(exclude=tuple(left_out)).dump(reduction)
    return answer
