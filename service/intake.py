"""A file and the raw settings -> a reduction: the one door of the server and of the command line."""

from collections.abc import Callable
from pathlib import Path

from schemas.settings import load_settings
from service.domain.results import Reduction
from service.pipeline import reduce_flight
from service.readers.limits import DEFAULT_LIMITS
from service.readers.registry import read_log

MOST_BATCH_BYTES = DEFAULT_LIMITS.batch_bytes
"""Of a JSON batch; the reader refuses more, so that nobody needs to take it in."""

SETTINGS_POINTER = "/settings"
SHARE_OF_READING = 0.5
"""Of the progress shown."""

Progress = Callable[[float], None]


def reduce_file(
    path: Path, *, sha256: str, settings: object | None = None, progress: Progress | None = None
) -> Reduction:
    """Read the log at `path` and reduce it.

    Parameters
    ----------
    path : the log, table or batch; its format is found from its bytes.
    sha256 : of its bytes.
    settings : decoded JSON given beside the file. None lets a batch's own settings count; else they replace those.
    progress : called with the share done, 0 to 1.

    Raises
    ------
    UnreadableInput, WrongValues, InputTooLarge : see `service.domain.errors`.
    """
    given = load_settings(settings, SETTINGS_POINTER)
    read = read_log(path, sha256=sha256, columns=given.columns or None, progress=_part(progress, 0.0, SHARE_OF_READING))
    if settings is None:
        given = load_settings(read.settings, SETTINGS_POINTER)
    return reduce_flight(read.log, given, progress=_part(progress, SHARE_OF_READING, 1.0))


def _part(progress: Progress | None, start: float, end: float) -> Progress | None:
    if progress is None:
        return None
    return lambda share: progress(start + (end - start) * share)
