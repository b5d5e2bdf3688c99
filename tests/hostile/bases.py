"""Sound flights in every form that a client may send: what the campaign damages."""

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np

from service.domain.codes import LogFormat
from service.domain.log import DecodedLog
from tests.synthetic.families import simulate_mixed
from tests.synthetic.ulog_file import Variant, write_ulog
from tests.unit.readers.example import as_batch, as_table, circling_log

SHARED_LOGS = Path(__file__).parents[3] / "shared" / "logs"
LARGEST_SHARED_BYTES = 300_000
"""Real logs are cut to this, so that a case stays quick."""
SAMPLES = 400
"""About as many a stream keeps, for the same reason."""

SETTINGS: Mapping[str, Any] = {
    "aircraft": {
        "reference_mass_kg": 6.0,
        "mass_kg": 6.4,
        "mass_uncertainty_kg": 0.1,
        "maximum_bank_deg": 45,
        "configurations": [
            {"name": "clean", "stall_speed_mps": 11.2, "stall_speed_uncertainty_mps": 0.3},
            {"name": "flaps", "wing_area_m2": 0.6, "lift_coefficient_max": 1.6},
        ],
    },
    "configuration_times": [{"start_s": 0, "name": "clean"}, {"start_s": 20, "name": "flaps"}],
    "probe": {"zero_offset_pa": 0.8, "zero_offset_uncertainty_pa": 0.5, "full_scale_pa": 6900},
    "loiters": [{"start_s": 8, "end_s": 600}],
    "warnings": {"caution_below": 0.3, "warning_below": 0.1, "hold_s": 0.5},
}


@dataclass(frozen=True, slots=True)
class Variation:
    """How a log is written as a ULog."""

    name: str
    variant: Variant


VARIATIONS = (
    Variation("plain", Variant()),
    Variation("old", Variant(generation="old", sample_times=False, hectopascals=True, static_topic=1, gps_topic=1)),
    Variation("two probes", Variant(second_probe="dead", filler_bytes=4_000, dropouts=[(3.0, 200), (9.0, 65535)])),
    Variation("tail-sitter", Variant(tail_sitter=True, acceleration_topic=1)),
)


@cache
def flights() -> tuple[DecodedLog, ...]:
    """Two simulated in gusts that end in a fit within a fraction of a second, and two short ones."""
    simulated = simulate_mixed(("with_ground", "slow_sensors"), 1, seed=1)
    (grounded,), (slow,) = simulated["with_ground"], simulated["slow_sensors"]
    return (_thinned(grounded.log), _thinned(slow.log), circling_log(40.0), circling_log(12.0))


def _thinned(log: DecodedLog) -> DecodedLog:
    """The log with fewer samples of each stream."""
    names = ("probe", "static", "temperature", "gps", "attitude", "load_factor", "ground_contact")
    return replace(log, **{name: _every(getattr(log, name)) for name in names})


def _every(samples: Any) -> Any:
    if samples is None:
        return None
    step = max(1, samples.time_s.size // SAMPLES)
    values = {name: getattr(samples, name) for name in samples.__slots__}
    return replace(samples, **{name: v[::step].copy() for name, v in values.items() if isinstance(v, np.ndarray)})


def as_ulog(log: DecodedLog, variant: Variant) -> bytes:
    """The bytes of a ULog of this log."""
    with TemporaryDirectory() as folder:
        path = Path(folder) / "log"
        write_ulog(path, log, variant)
        return path.read_bytes()


@cache
def bases(log_format: LogFormat) -> tuple[bytes, ...]:
    """The flights in one format."""
    if log_format is LogFormat.CSV:
        return tuple(as_table(log).encode() for log in flights())
    if log_format is LogFormat.BATCH:
        return tuple(json.dumps(batch).encode() for batch in batches())
    written = [as_ulog(log, each.variant) for log in flights() for each in VARIATIONS[:2]]
    written += [as_ulog(flights()[2], each.variant) for each in VARIATIONS[2:]]
    return (*written, *_shared())


@cache
def batches() -> tuple[dict[str, Any], ...]:
    """The flights as batches; with settings and without."""
    made = [as_batch(log) for log in flights()]
    return tuple(
        batch | {"settings": dict(SETTINGS)} if number % 2 == 0 else batch for number, batch in enumerate(made)
    )


def _shared() -> tuple[bytes, ...]:
    """The beginnings of real logs, where they are at hand."""
    found = sorted(SHARED_LOGS.rglob("*.ulg"))
    return tuple(_head(path) for path in found)


def _head(path: Path) -> bytes:
    with path.open("rb") as file:
        return file.read(LARGEST_SHARED_BYTES)
