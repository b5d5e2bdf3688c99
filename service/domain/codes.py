"""Closed lists of codes that appear in answers, each with its sentence.

The OpenAPI document enumerates them from here.
"""

from enum import IntFlag, StrEnum


class Verdict(StrEnum):
    ACCEPTED = "accepted"
    DOUBTFUL = "doubtful"
    REFUSED = "refused"


class ZeroOffsetSource(StrEnum):
    GROUND = "ground"
    GIVEN = "given"
    FITTED = "fitted"
    PRIOR = "prior"


class Direction(StrEnum):
    LEFT = "left"
    RIGHT = "right"
    STRAIGHT = "straight"


class Level(StrEnum):
    CAUTION = "caution"
    WARNING = "warning"


class FaultKind(StrEnum):
    FROZEN = "frozen"
    BLOCKED = "blocked"
    TRAPPED = "trapped"
    SWAPPED = "swapped"
    LEAK = "leak"
    SPIKES = "spikes"
    SATURATED = "saturated"
    DROPOUT = "dropout"
    DEAD = "dead"
    FROZEN_STATIC = "frozen_static"


class LogFormat(StrEnum):
    ULOG = "ulog"
    CSV = "csv"
    BATCH = "batch"


class Reason(StrEnum):
    """Why a verdict is what it is; a reason beside `accepted` is a remark."""

    NO_PROBE = "no_probe"
    NO_GPS = "no_gps"
    NO_FIX = "no_fix"
    NO_OVERLAP = "no_overlap"
    TOO_FEW_SAMPLES = "too_few_samples"
    NOT_AIRBORNE = "not_airborne"
    HEADING_COVERAGE = "heading_coverage"
    PROBE_FAULT = "probe_fault"
    STATIC_FAULT = "static_fault"
    SCALE_OUT_OF_RANGE = "scale_out_of_range"
    SCALE_CHANGED = "scale_changed"
    RESIDUALS = "residuals"
    NOT_CONVERGED = "not_converged"
    INTERVAL_WIDE = "interval_wide"
    LOITERS_DISAGREE = "loiters_disagree"
    ZERO_OFFSET_ASSUMED = "zero_offset_assumed"
    ZERO_OFFSET_CONTRADICTED = "zero_offset_contradicted"
    STANDARD_TEMPERATURE = "standard_temperature"
    STANDARD_STATIC = "standard_static"
    STALE_AIR = "stale_air"
    FEW_CIRCLES = "few_circles"
    TIME_STEPS_BACK = "time_steps_back"
    TRUNCATED = "truncated"


class Flag(IntFlag):
    """Per-sample flags of the series; the wire name is the member's name in lower case."""

    MISSING = 1
    BELOW_ZERO = 2
    UNCALIBRATED = 4
    EXTRAPOLATED = 8
    FAULTY = 16
    ON_GROUND = 32
    STANDARD_STATIC = 64
    STANDARD_TEMPERATURE = 128
    NO_LOAD_FACTOR = 256
    CAUTION = 512
    WARNING = 1024
    TIME_REORDERED = 2048


CAUTIONS: dict[str, str] = {
    "advisory": "Advisory only: this service is never a stall-warning device.",
    "flight_manual": "It replaces or amends no approved flight manual.",
    "no_warning_no_proof": "The absence of a warning is no proof of safety.",
    "stall_speed_unverified": (
        "The stall speed is the user's and unverified: mass, centre of gravity, flaps, ice and damage change it."
    ),
    "gusts_between_samples": "Gusts between the samples are not seen.",
    "flown_range": "The factor holds for the speeds and the configuration flown.",
    "factor_above_one": "A factor above 1 makes an aircraft that holds indicated speed fly slower.",
    "inspect_probe": "Inspect the probe and its tubes before loading a factor.",
    "verify_in_flight": (
        "Verify in flight at a safe height within local airspace and line-of-sight rules, "
        "never by slowing toward the stall when low."
    ),
    "manned_aircraft": "Manned aircraft: licensed maintenance and pilots only.",
    "local_regulations": "Local regulations come first.",
}
"""Code -> sentence; every form of an answer carries them all."""
