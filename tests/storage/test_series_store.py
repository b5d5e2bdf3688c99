"""Series kept and read in part, on a folder and on an object store; and files that are damaged."""

import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from werkzeug.wrappers import Response

from schemas.fields import SERIES_DECIMALS
from schemas.reduction import ReductionSchema
from schemas.wire import encode
from service.domain.arrays import FloatArray
from service.domain.errors import WrongValues
from service.domain.results import CorrectedSeries, Reduction, StallMargins
from service.storage.blobs import BlobDamaged, BlobMissing, BlobStore
from service.storage.errors import StorageUnavailable
from service.storage.local_store import LocalStore
from service.storage.log_store import open_store
from service.storage.series_file import CHUNK_SAMPLES, COLUMNS, MILLIONTHS, file_of, read_part
from service.storage.series_store import (
    SeriesAbsent,
    SeriesPart,
    SeriesStore,
    read_series,
    series_key,
    write_series,
)
from tests import made
from tests.storage.object_server import ObjectServer, store_of_tests

PATIENCE_S = 120
KEY = series_key("01ABCXYZ", 1)
HOUR_AT_10_HZ = 36_000
MOST_BYTES_PER_SAMPLE = 40
"""Of fourteen columns. As JSON they take nearly 150."""
FLIPS = 150


@pytest.fixture(scope="module")
def server() -> Iterator[ObjectServer]:
    running = ObjectServer()
    yield running
    running.close()


@pytest.fixture
def bucket(server: ObjectServer, monkeypatch: pytest.MonkeyPatch) -> Iterator[str]:
    store_of_tests(monkeypatch)
    yield server.new_bucket()
    server.forget()


@pytest.fixture(params=["folder", "objects"])
def blobs(request: pytest.FixtureRequest, tmp_path: Path) -> BlobStore:
    return open_store(tmp_path / "kept" if request.param == "folder" else request.getfixturevalue("bucket"))


@pytest.fixture
def folder(tmp_path: Path) -> LocalStore:
    return LocalStore(tmp_path / "kept")


def flown(samples: int, seed: int = 1) -> Reduction:
    """An answer with series as flights have them: noisy, with gaps, times at 10 Hz with a jitter, some twice."""
    rng = np.random.default_rng(seed)
    time_s = np.sort(np.arange(samples) * 0.1 + rng.uniform(0.0, 0.02, samples))
    time_s[1::97] = time_s[: time_s[1::97].size * 97 : 97]
    speed = 17.0 + np.cumsum(rng.normal(0.0, 0.05, samples)) % 3.0 + rng.normal(0.0, 0.2, samples)
    speed[rng.random(samples) < 0.01] = np.nan
    flags = np.repeat(rng.integers(0, 4096, samples // 500 + 1), 500)[:samples].astype(np.uint32)
    scaled = [speed * factor for factor in (1.06, 1.0, 1.02, 1.05)]
    airspeed = CorrectedSeries(time_s, *scaled, 0.05 + speed / 1000.0, 0.07 + speed / 900.0, flags)
    load = 1.0 + np.abs(rng.normal(0.0, 0.1, samples))
    stall = 11.2 * np.sqrt(load)
    ratio = speed / stall - 1.0
    margins = StallMargins(
        time_s.copy(), load, stall, ratio, ratio - 0.05, ratio + 0.06, flags ^ np.uint32(512), "bank"
    )
    return replace(made.reduction(), airspeed=airspeed, stall_margins=margins)


def columns_of(series: CorrectedSeries | StallMargins) -> dict[str, FloatArray]:
    """What is to come back: six decimals, and times as they were."""
    columns = {field.name: getattr(series, field.name) for field in fields(series) if field.type == FloatArray}
    return {name: column if name == "time_s" else np.round(column, 6) for name, column in columns.items()}


def part_of(part: SeriesPart | SeriesAbsent) -> SeriesPart:
    assert isinstance(part, SeriesPart)
    return part


def check(part: SeriesPart | SeriesAbsent, series: Any, chosen: Any = slice(None), names: Any = None) -> None:
    expected = {name: column[chosen] for name, column in columns_of(series).items() if names is None or name in names}
    found = part_of(part)
    assert found.columns.keys() == expected.keys()
    for name, column in expected.items():
        assert found.columns[name].dtype == np.float64
        np.testing.assert_array_equal(found.columns[name], column, err_msg=name)
    assert found.flags.dtype == np.uint32
    np.testing.assert_array_equal(found.flags, series.flags[chosen])


# --- whole and in part ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("samples", [0, 1, 2, CHUNK_SAMPLES - 1, CHUNK_SAMPLES, CHUNK_SAMPLES + 1, 20_000])
def test_the_whole_comes_back(blobs: BlobStore, samples: int) -> None:
    reduction = flown(samples)
    size_bytes = write_series(blobs, KEY, reduction)
    assert blobs.size(KEY) == size_bytes
    check(read_series(blobs, KEY, "airspeed"), reduction.airspeed)
    check(read_series(blobs, KEY, "stall_margins"), reduction.stall_margins)


def test_every_column_of_the_records_is_kept() -> None:
    assert list(COLUMNS["airspeed"]) == list(columns_of(made.series()))
    assert list(COLUMNS["stall_margins"]) == list(columns_of(made.margins()))


def test_a_kept_answer_is_the_same_on_the_wire_digit_by_digit(blobs: BlobStore) -> None:
    reduction = flown(5000)
    write_series(blobs, KEY, reduction)

    def read_back(record: Any, group: Any) -> Any:
        part = part_of(read_series(blobs, KEY, group))
        return replace(record, flags=part.flags, **part.columns)

    kept = replace(
        reduction,
        airspeed=read_back(reduction.airspeed, "airspeed"),
        stall_margins=read_back(reduction.stall_margins, "stall_margins"),
    )
    assert 10.0**SERIES_DECIMALS == MILLIONTHS
    assert encode(ReductionSchema().dump(kept)) == encode(ReductionSchema().dump(reduction))


@pytest.mark.parametrize("seed", range(6))
def test_a_part_is_a_slice_of_the_whole(blobs: BlobStore, seed: int) -> None:
    reduction = flown(2 * CHUNK_SAMPLES + 500)
    write_series(blobs, KEY, reduction)
    rng = np.random.default_rng(seed)
    for series, group in ((reduction.airspeed, "airspeed"), (reduction.stall_margins, "stall_margins")):
        time_s = columns_of(series)["time_s"]
        # ends between samples, on samples, on the first of a chunk, outside
        ends = [*rng.uniform(-10.0, time_s[-1] + 10.0, 2), *rng.choice(time_s, 2), time_s[CHUNK_SAMPLES], -1.0, 1e9]
        for _ in range(6):
            from_s, to_s = (float(end) for end in rng.choice(ends, 2))
            names = list(rng.choice(COLUMNS[group], 3, replace=False))
            chosen = (time_s >= from_s) & (time_s <= to_s)
            check(read_series(blobs, KEY, group, from_s, to_s, names), series, chosen, names)
            check(read_series(blobs, KEY, group, from_s, None), series, time_s >= from_s)
            check(read_series(blobs, KEY, group, None, to_s), series, time_s <= to_s)


def test_the_end_before_the_beginning_is_a_part_without_samples(blobs: BlobStore) -> None:
    write_series(blobs, KEY, flown(2 * CHUNK_SAMPLES))
    part = part_of(read_series(blobs, KEY, "airspeed", 1500.0, 5.0))
    assert [column.size for column in (*part.columns.values(), part.flags)] == [0] * (len(COLUMNS["airspeed"]) + 1)


@pytest.mark.parametrize("end", [CHUNK_SAMPLES - 2, CHUNK_SAMPLES - 1, CHUNK_SAMPLES, 2 * CHUNK_SAMPLES + 3])
def test_a_time_that_many_samples_share_across_chunks(folder: LocalStore, end: int) -> None:
    reduction = flown(3 * CHUNK_SAMPLES)
    assert reduction.airspeed is not None
    time_s = reduction.airspeed.time_s
    time_s[CHUNK_SAMPLES - 3 : end + 1] = time_s[CHUNK_SAMPLES - 3]
    write_series(folder, KEY, replace(reduction, stall_margins=None))
    at_s = float(time_s[end])
    check(read_series(folder, KEY, "airspeed", at_s, at_s), reduction.airspeed, time_s == at_s)


def test_a_part_of_an_object_is_read_without_the_rest(bucket: str, server: ObjectServer) -> None:
    blobs = open_store(bucket)
    reduction = flown(HOUR_AT_10_HZ)
    size_bytes = write_series(blobs, KEY, reduction)
    server.forget()
    part = part_of(read_series(blobs, KEY, "airspeed", 1000.0, 1060.0, ["time_s", "true_mps"]))
    assert part.flags.size == pytest.approx(600, abs=3)
    fetched = [asked.answered_bytes for asked in server.asked if asked.method == "GET"]
    assert sum(fetched) < size_bytes / 2
    assert len(fetched) <= 8


def test_columns_that_are_not_there_are_refused(folder: LocalStore) -> None:
    write_series(folder, KEY, flown(10))
    for name in ("margin", "flags", "", "../stall_margins/margin"):
        with pytest.raises(WrongValues) as caught:
            read_series(folder, KEY, "airspeed", columns=["time_s", name])
        assert list(caught.value.errors) == ["/columns"]
    assert part_of(read_series(folder, KEY, "airspeed", columns=[])).columns == {}


# --- what is missing, what is odd -------------------------------------------------------------------------------------


def test_series_that_were_not_made_come_with_their_reason(blobs: BlobStore) -> None:
    write_series(blobs, KEY, made.refused_reduction())
    assert read_series(blobs, KEY, "airspeed") == SeriesAbsent("There is no probe.")
    assert read_series(blobs, KEY, "stall_margins", 1.0, 2.0, ["margin"]) == SeriesAbsent("No stall speed is given.")
    write_series(blobs, KEY, replace(made.refused_reduction(), calibration=made.calibration()))
    assert read_series(blobs, KEY, "airspeed") == SeriesAbsent("There is no probe in this log.")


def test_margins_at_times_of_their_own(folder: LocalStore) -> None:
    reduction = flown(100)
    assert reduction.stall_margins is not None
    reduction = replace(reduction, stall_margins=replace(reduction.stall_margins, time_s=np.arange(100.0)))
    write_series(folder, KEY, reduction)
    check(read_series(folder, KEY, "stall_margins", 3.0, 7.0), reduction.stall_margins, slice(3, 8))
    check(read_series(folder, KEY, "airspeed"), reduction.airspeed)


@pytest.mark.parametrize("value", [np.inf, -np.inf, 2147.483648, -2147.483648, 1e300, 5e-324])
def test_numbers_of_any_size_are_kept(folder: LocalStore, value: float) -> None:
    reduction = flown(4)
    assert reduction.airspeed is not None
    odd = np.array([value, np.nan, -0.0, 17.1234564])
    reduction = replace(reduction, airspeed=replace(reduction.airspeed, true_mps=odd))
    write_series(folder, KEY, reduction)
    kept = part_of(read_series(folder, KEY, "airspeed")).columns["true_mps"]
    np.testing.assert_allclose(kept, odd, rtol=0.0, atol=5.1e-7)


def test_times_keep_every_digit_and_may_be_negative(folder: LocalStore) -> None:
    time_s = np.array([-1e11, -1 / 3, 0.0, 1 / 3, 1e11 + 1 / 3])
    reduction = flown(5)
    assert reduction.airspeed is not None
    write_series(folder, KEY, replace(reduction, airspeed=replace(reduction.airspeed, time_s=time_s)))
    part = part_of(read_series(folder, KEY, "airspeed", -1 / 3, 1 / 3))
    np.testing.assert_array_equal(part.columns["time_s"], time_s[1:4])


def test_times_that_go_back_are_a_mistake_of_ours(folder: LocalStore) -> None:
    reduction = flown(3)
    assert reduction.airspeed is not None
    backward = replace(reduction.airspeed, time_s=np.array([0.0, 2.0, 1.0]))
    with pytest.raises(ValueError, match="go back"):
        write_series(folder, KEY, replace(reduction, airspeed=backward))
    assert folder.size(KEY) is None


def test_a_reduction_done_once_more_replaces_the_series_and_gives_the_same_file(blobs: BlobStore) -> None:
    write_series(blobs, KEY, flown(50, seed=1))
    check(read_series(blobs, KEY, "airspeed"), flown(50, seed=1).airspeed)
    write_series(blobs, KEY, flown(60, seed=2))
    check(read_series(blobs, KEY, "airspeed"), flown(60, seed=2).airspeed)
    assert file_of(flown(60, seed=2)) == file_of(flown(60, seed=2))


def test_the_store_of_series(blobs: BlobStore, tmp_path: Path) -> None:
    scratch = tmp_path / "scratch"
    scratch.mkdir()
    series = SeriesStore(blobs, scratch)
    with pytest.raises(BlobMissing):
        series.read(KEY, "airspeed")
    size_bytes = series.write(KEY, flown(20))
    assert [(kept.key, kept.size_bytes) for kept in series.list()] == [(KEY, size_bytes)]
    check(series.read(KEY, "airspeed", columns=["true_mps"]), flown(20).airspeed, names=["true_mps"])
    series.delete(KEY)
    assert list(series.list()) == []
    assert list(scratch.iterdir()) == []


def test_an_hour_is_small(folder: LocalStore) -> None:
    assert bytes_per_sample(folder, flown(HOUR_AT_10_HZ)) < MOST_BYTES_PER_SAMPLE


def bytes_per_sample(blobs: BlobStore, reduction: Reduction) -> float:
    """What a reduction's series take, over the number of its samples."""
    assert reduction.airspeed is not None
    return write_series(blobs, KEY, reduction) / reduction.airspeed.time_s.size


# --- failures ---------------------------------------------------------------------------------------------------------


def test_a_store_that_fails_while_series_are_read_is_not_damage(bucket: str, server: ObjectServer) -> None:
    blobs = open_store(bucket)
    write_series(blobs, KEY, flown(HOUR_AT_10_HZ))
    for answered in range(6):
        server.forget()

        def fail(_request: object, answered: int = answered) -> Response | None:
            return None if len(server.asked) < answered else Response("no", 403)

        server.trouble = fail
        with pytest.raises(StorageUnavailable) as caught:
            read_series(blobs, KEY, "airspeed")
        assert not isinstance(caught.value, BlobDamaged)


def test_a_full_disk_is_told_and_ends_no_process(tmp_path: Path) -> None:
    program = (
        "import resource, sys; from pathlib import Path\n"
        "from service.storage.errors import StorageUnavailable; from service.storage.log_store import open_store\n"
        "from tests.storage.test_series_store import KEY, flown, read_series, write_series\n"
        "folder = Path(sys.argv[1]); blobs = open_store(folder / 'kept'); write_series(blobs, KEY, flown(100))\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))\n"
        "try: write_series(blobs, KEY, flown(30_000), scratch=folder)\n"
        "except StorageUnavailable: print(read_series(blobs, KEY, 'airspeed').flags.size, *folder.iterdir())\n"
    )
    command = [sys.executable, "-W", "error", "-c", program, str(tmp_path)]
    ended = subprocess.run(command, stdout=subprocess.PIPE, text=True, timeout=PATIENCE_S, check=True)
    assert ended.stdout == f"100 {tmp_path / 'kept'}\n"


def damaged(folder: LocalStore, content: bytes) -> None:
    """Put other content in place of the series, as a disk would: without a word."""
    path = folder.local_path(KEY)
    assert path is not None
    path.parent.mkdir(parents=True, exist_ok=True)
    path.unlink(missing_ok=True)
    path.write_bytes(content)


@pytest.mark.parametrize(
    "content", [b"", b"\0", b"no series", b"\x89HDF\r\n\x1a\n", b"\x89HDF\r\n\x1a\n" + bytes(5000)]
)
def test_a_file_of_something_else_is_damage(folder: LocalStore, content: bytes) -> None:
    damaged(folder, content)
    with pytest.raises(BlobDamaged):
        read_series(folder, KEY, "airspeed")


def test_damage_in_the_object_store(bucket: str, server: ObjectServer) -> None:
    blobs = open_store(bucket)
    write_series(blobs, KEY, flown(50))

    def zeros(request: Any) -> Response | None:
        answer = server.answer_of_store(request)
        answer.set_data(bytes(len(answer.get_data())))
        return answer if request.method == "GET" else None

    server.trouble = zeros
    with pytest.raises(BlobDamaged):
        read_series(blobs, KEY, "airspeed")


@pytest.mark.parametrize("share", [0.01, 0.3, 0.9, 0.999])
def test_a_file_cut_short_is_damage(folder: LocalStore, share: float) -> None:
    content = file_of(flown(500))
    damaged(folder, content[: int(share * len(content))])
    with pytest.raises(BlobDamaged):
        read_series(folder, KEY, "airspeed")


def test_a_damaged_byte_anywhere_is_noticed_and_ends_no_process(tmp_path: Path) -> None:
    program = (
        "import sys; from pathlib import Path; from tests.storage.test_series_store import flip_bits\n"
        "print(*flip_bits(Path(sys.argv[1])))"
    )
    command = [sys.executable, "-W", "error", "-c", program, str(tmp_path / "flipped")]
    ended = subprocess.run(command, stdout=subprocess.PIPE, text=True, timeout=PATIENCE_S, check=True)
    noticed, as_before = (int(number) for number in ended.stdout.split())
    assert noticed + as_before == FLIPS
    # bytes that nothing stands in may change unnoticed
    assert noticed > 0.8 * FLIPS


def flip_bits(path: Path) -> tuple[int, int]:
    """How many flips of a bit are noticed, and how many change nothing. Fails where one changes a number."""
    noticed = 0
    rng = np.random.default_rng(1)
    for reduction in (flown(CHUNK_SAMPLES + 10), _noise(CHUNK_SAMPLES)):
        content = file_of(reduction)
        for flip in range(FLIPS // 2):
            # the structure stands for the most part at the beginning
            position = int(rng.integers(0, len(content) if flip % 2 else 5000))
            changed = bytearray(content)
            changed[position] ^= 1 << int(rng.integers(8))
            path.write_bytes(changed)
            try:
                check(read_part(path, "airspeed", None, None, None), reduction.airspeed)
                check(read_part(path, "stall_margins", None, None, None), reduction.stall_margins)
            except BlobDamaged:
                noticed += 1
    return noticed, FLIPS - noticed


def _noise(samples: int) -> Reduction:
    """Columns that cannot be compressed."""
    reduction = flown(samples)
    assert reduction.airspeed is not None
    names = COLUMNS["airspeed"][1:]
    columns = np.random.default_rng(1).uniform(-2147.0, 2147.0, (len(names), samples))
    return replace(reduction, airspeed=replace(reduction.airspeed, **dict(zip(names, columns, strict=True))))


def other_layout(root: h5py.File) -> None:
    root.attrs["layout"] = 2


def no_layout(root: h5py.File) -> None:
    del root.attrs["layout"]


def no_group(root: h5py.File) -> None:
    del root["airspeed"]


def a_number_for_a_group(root: h5py.File) -> None:
    del root["airspeed"]
    root["airspeed"] = 1.0


def _put(root: h5py.File, name: str, **dataset: Any) -> None:
    del root["airspeed"][name]
    root["airspeed"].create_dataset(name, **dataset)


def no_flags(root: h5py.File) -> None:
    del root["airspeed/flags"]


def a_shorter_column(root: h5py.File) -> None:
    _put(root, "true_mps", data=np.zeros(5, np.int32))


def a_scalar(root: h5py.File) -> None:
    _put(root, "true_mps", data=np.int32(5))


def a_table(root: h5py.File) -> None:
    _put(root, "true_mps", data=np.zeros((100, 2), np.int32))


def texts(root: h5py.File) -> None:
    _put(root, "true_mps", data=[b"a"] * 100)


def whole_numbers_for_times(root: h5py.File) -> None:
    _put(root, "time_s", data=np.zeros(100, np.int32))


def more_than_there_can_be(root: h5py.File) -> None:
    _put(root, "time_s", shape=(10**13,), dtype=np.float64, chunks=(8192,))


def columns_longer_than_there_can_be(root: h5py.File) -> None:
    samples = 60_000_000
    index = -(-samples // CHUNK_SAMPLES)
    for name, column in list(root["airspeed"].items()):
        # nothing stands in them, so they take no room
        shape = (index if name == "chunk_start_s" else samples,)
        _put(root, name, shape=shape, dtype=column.dtype, chunks=(1000,))


def an_index_too_long(root: h5py.File) -> None:
    _put(root, "chunk_start_s", data=np.zeros(3))


def _other_file(root: h5py.File) -> str:
    """Where a file with a fitting column `x` stands."""
    path = f"{root.filename}.other"
    with h5py.File(path, "w") as other:
        other["x"] = np.zeros(100, np.int32)
    return path


def another_files_column(root: h5py.File) -> None:
    del root["airspeed/true_mps"]
    root["airspeed/true_mps"] = h5py.ExternalLink(_other_file(root), "/x")


def a_link_within(root: h5py.File) -> None:
    del root["airspeed/true_mps"]
    root["airspeed/true_mps"] = h5py.SoftLink("/airspeed/indicated_mps")


def bytes_of_another_file(root: h5py.File) -> None:
    _put(root, "true_mps", shape=(100,), dtype=np.int32, external=[("/etc/passwd", 0, 400)])


def a_column_put_together_elsewhere(root: h5py.File) -> None:
    layout = h5py.VirtualLayout(shape=(100,), dtype=np.int32)
    layout[:] = h5py.VirtualSource(_other_file(root), "x", shape=(100,))
    del root["airspeed/true_mps"]
    root["airspeed"].create_virtual_dataset("true_mps", layout)


@pytest.mark.parametrize(
    "change",
    [other_layout, no_layout, no_group, a_number_for_a_group, no_flags, a_shorter_column, a_scalar, a_table, texts,
     whole_numbers_for_times, more_than_there_can_be, columns_longer_than_there_can_be, an_index_too_long,
     another_files_column, a_link_within, bytes_of_another_file, a_column_put_together_elsewhere],
)  # fmt: skip
def test_a_file_with_other_things_in_it_is_damage(
    folder: LocalStore, tmp_path: Path, change: Callable[[h5py.File], None]
) -> None:
    path = tmp_path / "changed.h5"
    path.write_bytes(file_of(flown(100)))
    with h5py.File(path, "r+") as root:
        change(root)
    damaged(folder, path.read_bytes())
    with pytest.raises(BlobDamaged):
        read_series(folder, KEY, "airspeed")
