"""What every reader keeps: a sound log or a clear error, whatever the bytes are."""

import dataclasses
from collections.abc import Callable
from datetime import timedelta
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest

from service.domain.codes import LogFormat
from service.domain.errors import LoiterwiseError, UnreadableInput
from service.domain.log import DecodedLog
from service.readers.plausible import POSSIBLE
from service.readers.registry import READERS, read_log, sniff
from tests.synthetic.ulog_file import Variant, write_ulog
from tests.unit.readers.example import as_table, batch_bytes, circling_log

STREAMS = ("probe", "static", "temperature", "gps", "attitude", "load_factor", "ground_contact")
MUTATIONS = 150


@cache
def sample(log_format: LogFormat) -> bytes:
    """A small flight in this format."""
    log = circling_log(12.0)
    if log_format is LogFormat.BATCH:
        return batch_bytes(log)
    if log_format is LogFormat.CSV:
        return as_table(log).encode()
    with TemporaryDirectory() as folder:
        path = Path(folder) / "log"
        write_ulog(path, log, Variant(second_probe="dead", filler_bytes=3_000, dropouts=[(3.0, 200)]))
        return path.read_bytes()


@pytest.fixture(params=list(READERS))
def log_format(request: pytest.FixtureRequest) -> LogFormat:
    assert isinstance(request.param, LogFormat)
    return request.param


@pytest.fixture
def read(tmp_path: Path) -> Callable[[bytes], DecodedLog | LoiterwiseError]:
    """A sound log, or the error that a client would get; anything else fails."""

    def attempt(content: bytes) -> DecodedLog | LoiterwiseError:
        path = tmp_path / "upload.anything"
        path.write_bytes(content)
        try:
            log = read_log(path, sha256="f" * 64).log
        except LoiterwiseError as error:
            refusal = error
        else:
            assert_sound(log)
            return log
        assert 10 < len(str(refusal)) < 2_000
        return refusal

    return attempt


Read = Callable[[bytes], DecodedLog | LoiterwiseError]


def assert_sound(log: DecodedLog) -> None:
    """The contract of a decoded log."""
    assert log.sha256 == "f" * 64
    assert log.time_steps_back >= 0
    assert log.start_utc is None or log.start_utc.utcoffset() == timedelta(0)
    for name in STREAMS:
        samples = getattr(log, name)
        if samples is not None:
            assert_sound_stream(name, samples)
    assert all(gap.end_s > gap.start_s for gap in log.gaps)
    for note in log.sensors:
        assert note.reason
        assert note.end_s >= note.start_s
        assert note.samples > 0


def assert_sound_stream(name: str, samples: object) -> None:
    arrays = {
        column: value for column in samples.__slots__ if isinstance(value := getattr(samples, column), np.ndarray)
    }
    time_s = arrays["time_s"]
    assert time_s.size > 0
    assert np.isfinite(time_s).all()
    assert (np.diff(time_s) > 0.0).all()
    for column, values in arrays.items():
        assert values.shape == time_s.shape, (name, column)
        assert values.dtype == (np.bool_ if column in {"on_ground", "reordered"} else np.float64)
        assert values.flags.c_contiguous
        if column in POSSIBLE:
            known = values[np.isfinite(values)]
            low, high = POSSIBLE[column]
            assert ((known >= low) & (known <= high)).all(), (name, column)
            assert not np.isinf(values).any()
    if hasattr(samples, "source"):
        assert samples.source


def test_every_format_has_a_reader() -> None:
    assert set(READERS) == set(LogFormat)


def test_whole(log_format: LogFormat, read: Read) -> None:
    log = read(sample(log_format))
    assert isinstance(log, DecodedLog)
    assert log.format is log_format
    assert not log.truncated
    assert all(getattr(log, name) is not None for name in STREAMS[:-1])


def test_the_same_flight_is_the_same_in_every_format(read: Read) -> None:
    flight = circling_log(12.0)
    for log_format in READERS:
        log = read(sample(log_format))
        assert isinstance(log, DecodedLog)
        for name in STREAMS[:-1]:
            expected, found = getattr(flight, name), getattr(log, name)
            for field in dataclasses.fields(found):
                values = getattr(found, field.name)
                if isinstance(values, np.ndarray):
                    np.testing.assert_allclose(values, getattr(expected, field.name), rtol=1e-5, atol=2e-3)


def test_truncated_anywhere(log_format: LogFormat, read: Read) -> None:
    whole = sample(log_format)
    lengths = sorted({*range(1, 40), *np.linspace(40, len(whole) - 1, 120).astype(int).tolist()})
    outcomes = [read(whole[:length]) for length in lengths]
    sizes = [log.probe.time_s.size if log.probe else 0 for log in outcomes if isinstance(log, DecodedLog)]
    assert sizes == sorted(sizes)
    if log_format is LogFormat.BATCH:
        assert all(isinstance(outcome, UnreadableInput) for outcome in outcomes)
    else:
        assert max(sizes) >= 118


def test_a_cut_is_said_wherever_it_shows(read: Read) -> None:
    whole = sample(LogFormat.ULOG)
    logs = [read(whole[:length]) for length in range(len(whole) - 60, len(whole))]
    said = [log.truncated for log in logs if isinstance(log, DecodedLog)]
    # messages have 20 to 120 bytes: of sixty cuts few fall between two of them
    assert len(said) == 60
    assert sum(said) >= 57


@pytest.mark.parametrize("junk", [b"\0", b"\0" * 500, b"\xff" * 500, b"junk, junk\n" * 50, b"}", bytes(range(256)) * 4])
def test_trailing_junk(log_format: LogFormat, read: Read, junk: bytes) -> None:
    outcome = read(sample(log_format) + junk)
    if log_format is LogFormat.ULOG:
        assert isinstance(outcome, DecodedLog)
        assert outcome.probe is not None
        assert outcome.probe.time_s.size == 120
        assert outcome.truncated


def test_twice_over(log_format: LogFormat, read: Read) -> None:
    read(sample(log_format) * 2)


def test_mutated(log_format: LogFormat, read: Read) -> None:
    whole = np.frombuffer(sample(log_format), np.uint8)
    read_anyway = 0
    for seed in range(MUTATIONS):
        random = np.random.default_rng(seed)
        changed = whole.copy()
        places = random.integers(0, changed.size, random.integers(1, 8))
        changed[places] = random.integers(0, 256, places.size)
        read_anyway += isinstance(read(changed.tobytes()), DecodedLog)
    assert log_format is not LogFormat.ULOG or read_anyway > MUTATIONS // 2


def test_spliced(log_format: LogFormat, read: Read) -> None:
    whole = sample(log_format)
    for seed in range(MUTATIONS // 3):
        start, end, into = sorted(np.random.default_rng(seed).integers(0, len(whole), 3).tolist())
        read(whole[:into] + whole[start:end] + whole[into:])


@pytest.mark.parametrize(
    "content", [b"", b"U", b"\0", b"{", b"1", b"\n", b"\xff", b"\xfe\xff", b"ULog", b"ULog\x01\x12\x35"]
)
def test_next_to_nothing_is_unreadable(read: Read, content: bytes) -> None:
    assert isinstance(read(content), UnreadableInput)


def test_an_empty_body_is_called_so(read: Read) -> None:
    assert "empty" in str(read(b""))


@pytest.mark.parametrize(
    "content", [b"PK\x03\x04" + bytes(100), b"\x1f\x8b" + bytes(100), b"\x89PNG\r\n\x1a\n" + bytes(99)]
)
def test_other_formats_are_unreadable(read: Read, content: bytes) -> None:
    assert isinstance(read(content), UnreadableInput)


def test_the_format_is_told_from_the_first_bytes(log_format: LogFormat) -> None:
    assert sniff(sample(log_format)[:64]) is log_format


def test_progress_stays_within_bounds(log_format: LogFormat, tmp_path: Path) -> None:
    path = tmp_path / "upload"
    path.write_bytes(sample(log_format))
    shares: list[float] = []
    read_log(path, sha256="", progress=shares.append)
    assert shares
    assert all(0.0 <= share <= 1.0 for share in shares)
    assert shares[-1] == 1.0
