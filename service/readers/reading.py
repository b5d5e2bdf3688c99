"""What each reader is given and what it gives back."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from service.domain.log import DecodedLog
from service.domain.settings import ColumnMeaning
from service.readers.limits import DEFAULT_LIMITS, ReadingLimits

Progress = Callable[[float], None]
"""Called with the share read so far, 0 to 1."""


def no_progress(_share: float) -> None:
    """Tell nobody."""


@dataclass(frozen=True, slots=True)
class ReadRequest:
    sha256: str
    columns: Mapping[str, ColumnMeaning] = field(default_factory=dict)
    """Foreign names of a CSV -> meaning; other formats have no use for it."""
    progress: Progress = no_progress
    limits: ReadingLimits = DEFAULT_LIMITS


@dataclass(frozen=True, slots=True)
class ReadResult:
    log: DecodedLog
    settings: Mapping[str, object] | None = None
    """Settings that came inside a batch, as decoded and not yet validated; None for other formats."""
