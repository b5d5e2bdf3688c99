"""Writes `samples/`: the same flight as ULog, JSON batch, CSV and foreign CSV, one flight to refuse, and the answers.

    python -m tests.synthetic.make_samples            everything, in place
    python -m tests.synthetic.make_samples --answers  the expected answers alone, after a change of method

Deterministic: the same sources give the same bytes on the same platform.
"""

import argparse
import hashlib
import json
import sys
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from schemas.reduction import dump_reduction
from schemas.wire import decode, encode
from service.domain.arrays import FloatArray
from service.domain.glossary import STREAMS
from service.domain.log import DecodedLog
from service.intake import reduce_file
from service.readers.units import to_si
from tests.synthetic.sample_flights import COLUMNS, SETTINGS, half_circle, survey
from tests.synthetic.truth import SimulatedFlight
from tests.synthetic.ulog_file import write_ulog

FOLDER = Path(__file__).parents[2] / "samples"
CASES: Mapping[str, str | None] = {
    "survey.ulg": "settings.json",
    "survey.json": None,
    "survey.csv": "settings.json",
    "survey_foreign.csv": "settings_foreign.json",
    "half_circle.json": None,
}
"""File -> the settings to send beside it; a batch brings its own."""
FOREIGN_DECIMALS = {"clock": 3, "pitot dp": 4, "static": 3, "OAT": 2, "GS": 3, "TRK": 2, "ALT": 1, "nz": 3}


def write_flights(folder: Path) -> None:
    """All files but the expected answers."""
    flight, refused = survey(), half_circle()
    write_ulog(folder / "survey.ulg", flight.log)
    (folder / "survey.json").write_text(batch_text(flight.log, SETTINGS))
    (folder / "half_circle.json").write_text(batch_text(refused.log, SETTINGS))
    (folder / "survey.csv").write_text(table_text(flight.log))
    (folder / "survey_foreign.csv").write_text(foreign_text(flight.log), encoding="utf-8-sig")
    (folder / "settings.json").write_text(_pretty(SETTINGS))
    (folder / "settings_foreign.json").write_text(_pretty(SETTINGS | {"columns": COLUMNS}))
    (folder / "truth.json").write_text(_pretty({"survey": truth_of(flight), "half_circle": truth_of(refused)}))


def write_answers(folder: Path) -> None:
    """What the service answers to each file, without the series."""
    (folder / "expected").mkdir(exist_ok=True)
    for name in CASES:
        (folder / "expected" / answer_name(name)).write_text(_pretty(answer_to(folder, name)))


def answer_name(file: str) -> str:
    """`survey.ulg` -> `survey_ulg.json`."""
    return file.replace(".", "_") + ".json"


def answer_to(folder: Path, name: str) -> Any:
    """The summary for one file, by the door that the server and the command line use, to six digits."""
    path, settings = folder / name, CASES[name]
    given = None if settings is None else decode((folder / settings).read_bytes())
    reduction = reduce_file(path, sha256=hashlib.sha256(path.read_bytes()).hexdigest(), settings=given)
    return _six_digits(json.loads(encode(dump_reduction(reduction, frozenset()))))


def truth_of(flight: SimulatedFlight) -> dict[str, Any]:
    """What was put into a flight."""
    truth = flight.truth
    spans = [(loiter.start_s, loiter.end_s) for loiter in truth.loiters]
    north, east = truth.mean_air_velocity(spans)
    return _six_digits(  # type: ignore[no-any-return]
        {
            "speed_scale": truth.speed_scale,
            "pressure_scale": truth.pressure_scale,
            "zero_offset_pa": truth.zero_offset_pa,
            "gps_delay_s": truth.gps_delay_s,
            "gust_mps": truth.sigma_mps,
            "gust_length_m": truth.length_m,
            "wind_north_mps": north,
            "wind_east_mps": east,
            "loiters": [
                {
                    "start_s": loiter.start_s,
                    "end_s": loiter.end_s,
                    "direction": "right" if loiter.direction > 0 else "left",
                    "wind_north_mps": loiter.mean_air_north_mps,
                    "wind_east_mps": loiter.mean_air_east_mps,
                }
                for loiter in truth.loiters
            ],
        }
    )


# --- forms ------------------------------------------------------------------------------------------------------------


def batch_text(log: DecodedLog, settings: object) -> str:
    """A JSON batch, one column a line."""
    parts = [f'"start_utc": "{log.start_utc:%Y-%m-%dT%H:%M:%SZ}"']
    for stream, columns in _streams(log).items():
        lines = [f'"{name}": [{",".join(map(_number, values))}]' for name, values in columns.items()]
        parts.append(f'"{stream}": {{\n  ' + ",\n  ".join(lines) + "\n}")
    parts.append('"settings": ' + json.dumps(settings, indent=2))
    return "{\n" + ",\n".join(parts) + "\n}\n"


def table_text(log: DecodedLog) -> str:
    """A CSV with the contract's names; each stream in rows at its own times."""
    return _table(_columns(log), ",", "time_s", lambda _name, value: _number(value))


def foreign_text(log: DecodedLog) -> str:
    """A CSV with names and units of its own, semicolons and decimal commas."""
    given = _columns(log)
    time_s, north = given["velocity_north_mps"]
    _, east = given["velocity_east_mps"]
    given["ground_speed_mps"] = time_s, np.hypot(north, east)
    given["track_deg"] = time_s, np.degrees(np.arctan2(east, north)) % 360.0
    foreign = {}
    for heading, meaning in COLUMNS.items():
        if meaning["quantity"] != "time_s":
            times, values = given[meaning["quantity"]]
            unit = to_si(meaning["quantity"], meaning["unit"])
            foreign[heading] = times, (values - unit.offset) / unit.factor

    def written(name: str, value: float) -> str:
        return f"{value:.{FOREIGN_DECIMALS[name]}f}".replace(".", ",")

    return _table(foreign, ";", "clock", written)


def _table(
    columns: Mapping[str, tuple[FloatArray, FloatArray]],
    delimiter: str,
    time_name: str,
    written: Callable[[str, float], str],
) -> str:
    """Rows at every time of any column; a blank cell where a column has no sample."""
    times = np.unique(np.concatenate([time_s for time_s, _ in columns.values()]))
    cells = [[written(time_name, time) for time in times]]
    for name, (time_s, values) in columns.items():
        column = [""] * times.size
        for row, value in zip(np.searchsorted(times, time_s), values, strict=True):
            column[row] = written(name, value)
        cells.append(column)
    lines = [delimiter.join([time_name, *columns]), *(delimiter.join(row) for row in zip(*cells, strict=True))]
    return "\n".join(lines) + "\n"


def _streams(log: DecodedLog) -> dict[str, dict[str, FloatArray]]:
    """The streams that the log has, by the names of the contract."""
    found = {}
    for stream, names in STREAMS.items():
        samples = getattr(log, stream)
        given = {name: getattr(samples, name, None) for name in ("time_s", *names)}
        found[stream] = {name: values for name, values in given.items() if values is not None}
    return found


def _columns(log: DecodedLog) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Column -> its times and values."""
    return {
        name: (columns["time_s"], values)
        for columns in _streams(log).values()
        for name, values in columns.items()
        if name != "time_s"
    }


def _number(value: float) -> str:
    return f"{value:.9g}" if abs(value) < 1e6 else repr(float(value))


def _six_digits(document: Any) -> Any:
    if isinstance(document, dict):
        return {name: _six_digits(value) for name, value in document.items()}
    if isinstance(document, list):
        return [_six_digits(value) for value in document]
    return float(f"{document:.6g}") if isinstance(document, float) else document


def _pretty(document: object) -> str:
    return json.dumps(document, indent=2, ensure_ascii=False) + "\n"


def main(arguments: Iterable[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--answers", action="store_true", help="only the expected answers")
    options = parser.parse_args(None if arguments is None else list(arguments))
    if not options.answers:
        write_flights(FOLDER)
    write_answers(FOLDER)
    return 0


if __name__ == "__main__":
    sys.exit(main())
