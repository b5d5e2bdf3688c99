"""How much a reader takes before it says that the input is too large."""

from dataclasses import dataclass

MAXIMUM_SPAN_S = 14 * 86400.0
"""Longest log that makes sense [s]; later steps lay grids over the whole span."""

MAXIMUM_TIME_S = 1e11
"""Largest magnitude of a time [s]: beyond it a float no longer tells 0.1 ms."""


@dataclass(frozen=True, slots=True)
class ReadingLimits:
    """Limits of one reading. Passing one raises `InputTooLarge`, whose message names it."""

    batch_bytes: int = 64 * 1024 * 1024
    """Body of a JSON batch. Decoding takes six to eight times as much memory; larger logs come as table or log file."""
    settings_bytes: int = 1024 * 1024
    """Settings within a batch."""
    samples_per_stream: int = 5_000_000
    """Samples of one stream: 83 minutes at 1 kHz, 14 hours at 100 Hz."""
    table_rows: int = 5_000_000
    """Rows of a CSV."""
    table_columns: int = 1_000
    """Columns of a CSV, used or not."""
    line_characters: int = 65_536
    """Characters of one line of a CSV."""


DEFAULT_LIMITS = ReadingLimits()
