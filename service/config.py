"""Configuration from the environment: under `LOITERWISE_`, all optional (and `PORT`, as platforms set it)."""

import logging
import math
import os
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path
from typing import Any

PREFIX = "LOITERWISE_"
SHORTEST_KEY = 16
MIB = 1024 * 1024
DATA_FOLDER = "loiterwise-data"
"""Where `loiterwise serve` keeps flights when nothing is said: under the working directory."""

SECRET = frozenset({PREFIX + "KEY", PREFIX + "DATABASE_URL", PREFIX + "LOG_STORE_URL"})
"""Variables whose values no message shows."""


class ConfigurationWrong(Exception):
    """The environment says something that the service cannot start with; the message names the variable."""


class Access(StrEnum):
    OPEN = "open"
    KEYS = "keys"


@dataclass(frozen=True, slots=True)
class Config:
    """Settings of one server process. Sizes in bytes, times in seconds."""

    access: Access = Access.OPEN
    key: str | None = field(default=None, repr=False)
    """The bearer key that calls need while `access` is `keys`."""
    data: Path | None = None
    """The data folder: the database, the logs and series that are kept, uploads under way. None keeps nothing, unless
    `database_url` is set; uploads then rest in the system's temporary folder."""
    max_upload_bytes: int = 256 * MIB
    """Of a body as it is sent (compressed, if it is)."""
    max_decoded_bytes: int = 512 * MIB
    """Of a body after `Content-Encoding` is undone."""
    min_upload_rate: int = 16 * 1024
    """Bytes per second below which an upload is cut off."""
    upload_grace_s: float = 10.0
    """How long an upload may rest beyond that rate."""
    reductions_at_once: int = 2
    """Per worker process."""
    wait_s: float = 30.0
    """How long a request waits for its turn before 503."""
    log_level: str = "INFO"
    bind: str | None = None
    """Host, or host:port, to listen on."""
    workers: int = 2
    threads: int = 4
    database_url: str | None = field(default=None, repr=False)
    """SQLite or PostgreSQL; without it a SQLite file in the data folder."""
    log_store_url: str | None = field(default=None, repr=False)
    """Where logs and series rest; without it the data folder."""
    answer_wait_s: float = 30.0
    """How long `POST /v1/flights` waits for its reduction before it answers 202."""
    job_workers: int = 2
    """Processes that `serve` and `work` start to reduce kept flights; 0: none."""
    job_seconds: float = 120.0
    """Longest time of one attempt at a job."""
    job_memory_bytes: int = 2048 * MIB
    job_attempts: int = 3
    queue_limit: int = 1000
    """Jobs that wait; over it new ones are refused."""
    log_days: float | None = None
    """Age at which the logs of flights go; their results stay. None keeps them."""
    result_days: float | None = None
    """Age at which flights go, log and results."""

    @property
    def keeps(self) -> bool:
        """Are flights kept?"""
        return self.data is not None or self.database_url is not None

    @property
    def folder(self) -> Path:
        """The data folder, when flights are kept: a database by URL alone keeps its files in `loiterwise-data`."""
        return self.data or Path(DATA_FOLDER)

    @property
    def spool(self) -> Path:
        """Folder of the uploads under way."""
        return self.data / "spool" if self.data else Path(tempfile.gettempdir())


def config_from_environment(environment: Mapping[str, str] | None = None) -> Config:
    """Configuration that the environment asks for; unset or empty variables keep the defaults.

    Raises
    ------
    ConfigurationWrong : a value cannot be read, or `keys` comes without a usable key.
    """
    given = os.environ if environment is None else environment
    wanted = {name: value.strip() for name, value in given.items() if value.strip()}
    values = {
        name: _read(variable_of(name), wanted[variable_of(name)], parse)
        for name, parse in _PARSERS.items()
        if variable_of(name) in wanted
    }
    config = Config(**values)
    if config.access is Access.KEYS:
        _check_key(config.key)
    return config


def listen_address(config: Config, environment: Mapping[str, str] | None = None) -> str:
    """host:port that the server listens on.

    `LOITERWISE_BIND` decides; `PORT` is the port where it names none, else 8000. Without a host an open server stays on
    loopback, one with keys listens on all interfaces.
    """
    given = os.environ if environment is None else environment
    port = _read("PORT", given.get("PORT", "").strip() or "8000", _port)
    if config.bind is None:
        return f"{'127.0.0.1' if config.access is Access.OPEN else '0.0.0.0'}:{port}"
    host, _, own_port = config.bind.rpartition(":")
    if host.endswith("]") or (host and ":" not in host):
        return f"{host}:{_read(PREFIX + 'BIND', own_port, _port)}"
    bare_version_6 = ":" in config.bind and not config.bind.startswith("[")
    return f"[{config.bind}]:{port}" if bare_version_6 else f"{config.bind}:{port}"


def variable_of(name: str) -> str:
    """The environment variable of a field of `Config`."""
    return PREFIX + name.upper()


def _read(variable: str, text: str, parse: Callable[[str], Any]) -> Any:
    try:
        return parse(text)
    except ValueError as error:
        shown = "the value" if variable in SECRET else repr(text)
        raise ConfigurationWrong(f"{variable}: {shown} is not usable: {error}") from error


def _check_key(key: str | None) -> None:
    if key is None:
        raise ConfigurationWrong(
            f"{PREFIX}ACCESS=keys needs a first key: set {PREFIX}KEY (at least {SHORTEST_KEY} characters), "
            f"or {PREFIX}ACCESS=open to serve everyone who can reach the port"
        )


def _whole(text: str) -> int:
    number = int(text)
    if number < 1:
        raise ValueError("it must be a whole number of at least 1")
    return number


def _count(text: str) -> int:
    number = int(text)
    if number < 0:
        raise ValueError("it must be a whole number of at least 0")
    return number


def _positive(text: str) -> float:
    number = float(text)
    if not (math.isfinite(number) and number > 0):
        raise ValueError("it must be a number above 0")
    return number


def _database(text: str) -> str:
    if text.partition(":")[0].partition("+")[0] not in ("sqlite", "postgres", "postgresql"):
        raise ValueError("it must be sqlite:///... or postgresql://...")
    return text


def _seconds(text: str) -> float:
    number = float(text)
    if not (math.isfinite(number) and number >= 0):
        raise ValueError("it must be a number of at least 0")
    return number


def _port(text: str) -> int:
    number = int(text)
    if not 0 <= number <= 65535:
        raise ValueError("it must be a port, 0 to 65535")
    return number


def _level(text: str) -> str:
    if text.upper() not in logging.getLevelNamesMapping():
        raise ValueError("it must be DEBUG, INFO, WARNING or ERROR")
    return text.upper()


def _secret(text: str) -> str:
    if len(text) < SHORTEST_KEY or not text.isascii() or not text.isprintable() or " " in text:
        raise ValueError(f"it must have at least {SHORTEST_KEY} printable ASCII characters without spaces")
    return text


_PARSERS: dict[str, Callable[[str], Any]] = {
    "access": Access,
    "key": _secret,
    "data": Path,
    "max_upload_bytes": _whole,
    "max_decoded_bytes": _whole,
    "min_upload_rate": _whole,
    "upload_grace_s": _seconds,
    "reductions_at_once": _whole,
    "wait_s": _seconds,
    "log_level": _level,
    "bind": str,
    "workers": _whole,
    "threads": _whole,
    "database_url": _database,
    "log_store_url": str,
    "answer_wait_s": _seconds,
    "job_workers": _count,
    "job_seconds": _positive,
    "job_memory_bytes": _whole,
    "job_attempts": _whole,
    "queue_limit": _whole,
    "log_days": _positive,
    "result_days": _positive,
}
