"""Hostile requests, each told by its seed and number alone."""

import gzip
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.codes import LogFormat
from tests.hostile import bytes_damage, json_damage, table_damage, ulog_damage
from tests.hostile.bases import SETTINGS, bases
from tests.hostile.bytes_damage import LARGEST, Damage, Random

URL = "/v1/reductions"
BOUNDARY = "5f3a"
MEDIA_TYPES: Mapping[LogFormat, str] = {
    LogFormat.ULOG: "application/octet-stream",
    LogFormat.CSV: "text/csv",
    LogFormat.BATCH: "application/json",
}
KNOWING: Mapping[LogFormat, Mapping[str, Damage]] = {
    LogFormat.ULOG: ulog_damage.DAMAGES,
    LogFormat.CSV: table_damage.DAMAGES,
    LogFormat.BATCH: json_damage.DAMAGES,
}
FORMS = (*("raw",) * 6, "gzip", "gzip", "form", "form", *("form with settings",) * 2, "damaged gzip", "damaged form")
COLUMNS = {
    "columns": {
        "time_s": {"quantity": "time", "unit": "ms"},
        "impact_pressure_pa": {"quantity": "impact_pressure", "unit": "inH2O"},
        "velocity_north_mps": {"quantity": "velocity_north", "unit": "kt"},
        "air_temperature_k": {"quantity": "air_temperature", "unit": "degF"},
    }
}


@dataclass(frozen=True, slots=True)
class Case:
    """One request. `name` tells format, damages and form."""

    seed: int
    number: int
    name: str
    url: str
    body: bytes
    headers: Mapping[str, str]


def make_case(seed: int, number: int) -> Case:
    """The same seed and number give the same request."""
    random = np.random.default_rng((seed, number))
    log_format = tuple(MEDIA_TYPES)[number % len(MEDIA_TYPES)]
    names, content = _damaged(log_format, random)
    form = FORMS[int(random.integers(0, len(FORMS)))]
    body, headers = _sent(form, content[:LARGEST], MEDIA_TYPES[log_format], random)
    if random.random() < 0.1:
        headers["Content-Type"] = str(
            random.choice([*MEDIA_TYPES.values(), "text/plain", "", "a/b; boundary=" + BOUNDARY])
        )
    include = str(random.choice(["", "", "?include=airspeed,stall_margins,faults"]))
    return Case(seed, number, f"{log_format.value}: {' + '.join(names)} ({form})", URL + include, body, headers)


def _damaged(log_format: LogFormat, random: Random) -> tuple[list[str], bytes]:
    """Mostly one damage by someone who knows the format, sometimes several, sometimes a blind one or a splice."""
    whole = bases(log_format)
    content = whole[int(random.integers(0, len(whole)))]
    names: list[str] = []
    for _ in range(int(random.choice([1, 1, 1, 2, 3]))):
        # one who knows the format needs a file that still is of it: blind damage comes last
        knowing = not any(name in bytes_damage.DAMAGES or name == "splice" for name in names) and random.random() < 0.8
        pool = KNOWING[log_format] if knowing else bytes_damage.DAMAGES
        name = list(pool)[int(random.integers(0, len(pool)))]
        if name.startswith("json") and not _is_json(content):
            continue
        names.append(name)
        content = pool[name](content, random)[:LARGEST]
    if random.random() < 0.08:
        others = bases(tuple(MEDIA_TYPES)[int(random.integers(0, len(MEDIA_TYPES)))])
        names.append("splice")
        content = bytes_damage.splice(content, random, others[int(random.integers(0, len(others)))])
    return names, content


def _is_json(content: bytes) -> bool:
    """Whether a damaged batch can be damaged as a tree once more."""
    try:
        return isinstance(json.loads(content), dict)
    except (ValueError, RecursionError):
        return False


def _sent(form: str, content: bytes, media_type: str, random: Random) -> tuple[bytes, dict[str, str]]:
    if form == "raw":
        return content, {"Content-Type": media_type}
    if "gzip" in form:
        packed = gzip.compress(content, 1, mtime=0)
        if form.startswith("damaged"):
            packed = _blind(packed, random)
        return packed, {"Content-Type": media_type, "Content-Encoding": "gzip"}
    settings = None if form == "form" else _settings(random)
    body = multipart(content, settings)
    if form == "damaged form":
        body = _blind(body, random)
    return body, {"Content-Type": f"multipart/form-data; boundary={BOUNDARY}"}


def _blind(data: bytes, random: Random) -> bytes:
    damages: Sequence[Damage] = tuple(bytes_damage.DAMAGES.values())
    return damages[int(random.integers(0, len(damages)))](data, random)


def _settings(random: Random) -> bytes:
    """Sound settings, a mapping of columns, or damaged ones."""
    sound = json.dumps(COLUMNS if random.random() < 0.3 else SETTINGS).encode()
    if random.random() < 0.4:
        return sound
    names = ("json tokens", "json marks", "json swap_values", "json remove", "json rename", "json graft")
    return json_damage.DAMAGES[names[int(random.integers(0, len(names)))]](sound, random)


def multipart(log: bytes, settings: bytes | None = None, boundary: str = BOUNDARY) -> bytes:
    """A form with these parts."""
    parts = {"log": log} | ({} if settings is None else {"settings": settings})
    lines = [
        f'--{boundary}\r\nContent-Disposition: form-data; name="{name}"; filename="x"\r\n\r\n'.encode()
        + content
        + b"\r\n"
        for name, content in parts.items()
    ]
    return b"".join(lines) + f"--{boundary}--\r\n".encode()
