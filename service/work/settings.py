"""Settings of the workers of one machine, as they are handed from process to process."""

import dataclasses
import json
from dataclasses import dataclass, field
from typing import Self

MIB = 1024 * 1024


@dataclass(frozen=True, slots=True)
class WorkSettings:
    """Times in seconds, sizes in bytes."""

    database: str = field(repr=False)
    """URL, with its password. The tables are up to date before work begins."""
    store: str = field(repr=False)
    """Folder or URL of the logs and series."""
    spool: str
    """Folder for temporary files."""
    workers: int = 2
    """Processes that reduce; each does one flight at a time."""
    job_seconds: float = 120.0
    """Longest time of one attempt."""
    job_memory_bytes: int = 2048 * MIB
    """What a child may take beyond what it begins with."""
    job_attempts: int = 3
    lease_s: float = 15.0
    """For how long a job is a worker's without word from it: after so long another takes over from a dead one."""
    grace_s: float = 20.0
    """How long a job may go on once the worker is told to stop. Own choice: nearly all are done in a second or two."""
    log_days: float | None = None
    """Age at which logs go and their results stay; None keeps them."""
    result_days: float | None = None
    """Age at which flights go, log and results; None keeps them."""
    sweep_every_s: float = 3600.0
    log_level: str = "INFO"
    reducer: str = "service.intake.reduce_file"
    """Dotted name of what reduces a file; tests put their own in its place."""

    def to_line(self) -> bytes:
        """One line of JSON, for a process that is started with them."""
        return json.dumps(dataclasses.asdict(self)).encode() + b"\n"

    @classmethod
    def from_line(cls, line: bytes) -> Self:
        return cls(**json.loads(line))
