"""Blobs in a folder and in an object store: the same tests on both. Then what only one of them has."""

import hashlib
import os
import random
import signal
import stat
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from werkzeug.wrappers import Request, Response

from service.storage import object_store
from service.storage.blobs import PART_BYTES, BlobDamaged, BlobMissing, BlobStore
from service.storage.errors import StorageUnavailable
from service.storage.local_store import UNFINISHED, LocalStore
from service.storage.log_store import LogStore, log_key, open_log_store, open_store
from service.storage.object_store import Place, place_of
from service.storage.series_store import series_key
from tests.storage import putting
from tests.storage.object_server import ObjectServer, store_of_tests

PATIENCE_S = 60
KILLS = 3
"""At random moments, of each store."""
CONTENT = bytes(range(256)) * 40
SHA256 = hashlib.sha256(CONTENT).hexdigest()
SERIES = series_key("01ABCXYZ", 2)
KINDS_OF_STORE = ("folder", "objects")


@pytest.fixture(scope="module")
def server() -> Iterator[ObjectServer]:
    running = ObjectServer()
    yield running
    running.close()


@pytest.fixture
def bucket(server: ObjectServer, monkeypatch: pytest.MonkeyPatch) -> Iterator[str]:
    """URL of an empty place in an object store."""
    store_of_tests(monkeypatch)
    yield server.new_bucket()
    server.forget()


@pytest.fixture(params=KINDS_OF_STORE)
def location(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Of an empty store."""
    if request.param == "folder":
        return str(tmp_path / "kept")
    return str(request.getfixturevalue("bucket"))


@pytest.fixture
def blobs(location: str) -> BlobStore:
    return open_store(location)


@pytest.fixture
def folder_store(tmp_path: Path) -> LocalStore:
    return LocalStore(tmp_path / "kept")


@pytest.fixture
def upload(tmp_path: Path) -> Path:
    path = tmp_path / "upload"
    path.write_bytes(CONTENT)
    return path


def content_of(blobs: BlobStore, key: str) -> bytes:
    with blobs.open(key) as file:
        return file.read()


def keys(blobs: BlobStore) -> set[str]:
    return {blob.key for kind in ("logs", "series") for blob in blobs.list(kind)}


def files_in(folder: Path) -> list[Path]:
    return [path for path in folder.rglob("*") if path.is_file()]


# --- both stores ------------------------------------------------------------------------------------------------------


def test_what_was_put_comes_back_and_the_file_stays(blobs: BlobStore, upload: Path) -> None:
    blobs.put(log_key(SHA256), upload, SHA256)
    assert upload.read_bytes() == CONTENT
    upload.unlink()
    assert content_of(blobs, log_key(SHA256)) == CONTENT
    assert blobs.size(log_key(SHA256)) == len(CONTENT)


def test_an_empty_blob(blobs: BlobStore, tmp_path: Path) -> None:
    path, sha256 = tmp_path / "empty", hashlib.sha256().hexdigest()
    path.touch()
    blobs.put(log_key(sha256), path, sha256)
    assert content_of(blobs, log_key(sha256)) == b""
    assert blobs.size(log_key(sha256)) == 0


def test_what_is_not_there(blobs: BlobStore) -> None:
    assert blobs.size(log_key(SHA256)) is None
    assert list(blobs.list("logs")) == []
    with pytest.raises(BlobMissing):
        blobs.open(log_key(SHA256))
    blobs.delete(log_key(SHA256))
    assert blobs.discard_unfinished(0.0) == 0
    blobs.check_usable()


def test_deleted_is_gone(blobs: BlobStore, upload: Path) -> None:
    for key in (log_key(SHA256), SERIES):
        blobs.put(key, upload, SHA256)
        blobs.delete(key)
        assert blobs.size(key) is None
    assert keys(blobs) == set()


def test_content_that_is_not_what_was_said_is_not_kept(blobs: BlobStore, upload: Path) -> None:
    upload.write_bytes(CONTENT[:-1])
    for key in (log_key(SHA256), SERIES):
        with pytest.raises(StorageUnavailable, match="changed"):
            blobs.put(key, upload, SHA256)
    assert keys(blobs) == set()


def test_a_log_under_the_name_of_another_is_a_mistake_of_ours(blobs: BlobStore, upload: Path) -> None:
    with pytest.raises(ValueError, match="another content"):
        blobs.put(log_key("0" * 64), upload, SHA256)


@pytest.mark.parametrize(
    "key",
    ["", "logs/", "logs/../x", f"logs/{SHA256.upper()}", f"logs/{SHA256}/1", f"other/{SHA256}", "series/A/../1",
     "series/A", "series/A/1/2/3", "series/A.B/1", "/series/A/1", "series/A/1\n"],
)  # fmt: skip
def test_a_key_of_another_form_is_a_mistake_of_ours(blobs: BlobStore, upload: Path, key: str) -> None:
    for call in (blobs.open, blobs.size, blobs.delete, blobs.local_path, lambda k: blobs.put(k, upload, SHA256)):
        with pytest.raises(ValueError, match="no key"):
            call(key)


def test_series_of_a_key_are_replaced(blobs: BlobStore, tmp_path: Path) -> None:
    for number in (1, 2):
        path, sha256 = putting.made_file(tmp_path, number, 10_000)
        blobs.put(SERIES, path, sha256)
        assert content_of(blobs, SERIES) == path.read_bytes()
    assert keys(blobs) == {SERIES}


def test_a_log_cut_short_is_put_anew(blobs: BlobStore, upload: Path, server: ObjectServer) -> None:
    blobs.put(log_key(SHA256), upload, SHA256)
    own = blobs.local_path(log_key(SHA256))
    if own is None:
        # what the store tells of the object is another size; it is sent once more
        short = Response(
            headers={"Content-Length": "5", "Last-Modified": "Tue, 01 Dec 2026 10:00:00 GMT", "ETag": '"x"'}
        )
        server.forget()
        server.trouble = lambda request: short if request.method == "HEAD" else None
        blobs.put(log_key(SHA256), upload, SHA256)
        assert [asked.sent_bytes for asked in server.asked if asked.method == "PUT"] == [len(CONTENT)]
        return
    own.unlink()
    own.write_bytes(CONTENT[:5])
    blobs.put(log_key(SHA256), upload, SHA256)
    assert content_of(blobs, log_key(SHA256)) == CONTENT


def test_the_lists_hold_what_is_kept_with_size_and_age(blobs: BlobStore, upload: Path) -> None:
    blobs.put(log_key(SHA256), upload, SHA256)
    blobs.put(SERIES, upload, SHA256)
    blobs.put(series_key("01ABCXYZ", 2, 13), upload, SHA256)
    (log,) = blobs.list("logs")
    assert (log.key, log.size_bytes) == (log_key(SHA256), len(CONTENT))
    assert 0.0 <= log.age_s < PATIENCE_S
    assert {blob.key for blob in blobs.list("series")} == {SERIES, "series/01ABCXYZ/2/13"}


@pytest.mark.parametrize("part_bytes", [1, 1000, 4096, 1 << 22])
def test_parts_of_a_stream_are_slices_of_the_whole(blobs: BlobStore, upload: Path, part_bytes: int) -> None:
    blobs.put(log_key(SHA256), upload, SHA256)
    rng = random.Random(part_bytes)
    with blobs.open(log_key(SHA256), part_bytes=part_bytes) as file:
        for _ in range(10 if part_bytes == 1 else 60):
            start, length = rng.randrange(len(CONTENT) + 50), rng.randrange(5 if part_bytes == 1 else 5000)
            assert file.seek(start) == start
            assert file.read(length) == CONTENT[start : start + length]
            assert file.tell() == start + min(length, max(len(CONTENT) - start, 0))
        assert file.seek(-7, os.SEEK_END) == len(CONTENT) - 7
        assert file.read() == CONTENT[-7:]
        assert file.read() == b""


def test_a_stream_begun_reads_on_when_its_blob_is_replaced_or_says_that_it_cannot(
    blobs: BlobStore, tmp_path: Path
) -> None:
    first, second = (putting.made_file(tmp_path, number, 300_000) for number in (1, 2))
    blobs.put(SERIES, *first)
    with blobs.open(SERIES, part_bytes=4096) as file:
        begun = file.read(10)
        blobs.put(SERIES, *second)
        try:
            whole = begun + file.read()
        except StorageUnavailable:
            # never a mixture of both
            return
    assert whole == first[0].read_bytes()


def test_the_same_log_put_by_many_at_once(location: str, upload: Path) -> None:
    failures: list[BaseException] = []
    begin = threading.Barrier(8)

    def put() -> None:
        store = open_store(location)
        begin.wait()
        try:
            store.put(log_key(SHA256), upload, SHA256)
        except BaseException as error:
            failures.append(error)

    threads = [threading.Thread(target=put) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(PATIENCE_S)
    blobs = open_store(location)
    assert failures == []
    assert [blob.key for blob in blobs.list("logs")] == [log_key(SHA256)]
    assert content_of(blobs, log_key(SHA256)) == CONTENT
    assert blobs.discard_unfinished(-1.0) == 0


@pytest.mark.parametrize("seed", range(KILLS))
def test_killed_at_a_random_moment_leaves_whole_blobs_and_all_that_were_acknowledged(
    location: str, tmp_path: Path, seed: int
) -> None:
    uploads = tmp_path / "uploads"
    uploads.mkdir()
    command = [sys.executable, "-m", "tests.storage.putting", location, str(uploads)]
    child = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    assert child.stdout is not None
    # the first is on its way to the caller when the next is being put
    begun = [child.stdout.readline()]
    time.sleep(random.Random(seed).uniform(0.0, 0.25))
    child.kill()
    acknowledged = dict(line.split() for line in begun + child.stdout.readlines() if line.endswith("\n"))
    assert child.wait(PATIENCE_S) == -signal.SIGKILL
    child.stdout.close()

    blobs = open_store(location)
    kept = keys(blobs)
    assert acknowledged.keys() <= kept
    for number, key in enumerate(sorted(kept, key=lambda key: key in acknowledged, reverse=True)):
        found = hashlib.sha256(content_of(blobs, key)).hexdigest()
        assert number >= len(acknowledged) or found == acknowledged[key]
        assert found in {
            putting.made_file(tmp_path, made, 12 * putting.MIB)[1] for made in range(len(acknowledged) + 1)
        }
    assert blobs.discard_unfinished(-1.0) <= 1
    # a server may still end what it had been sent
    assert kept <= keys(blobs)


# --- logs -------------------------------------------------------------------------------------------------------------


def test_a_log_store_names_logs_by_their_content(location: str, upload: Path) -> None:
    logs = open_log_store(location)
    logs.put(upload, SHA256)
    open_store(location).put(SERIES, upload, SHA256)
    assert [(log.sha256, log.size_bytes) for log in logs.list()] == [(SHA256, len(CONTENT))]
    assert logs.size(SHA256) == len(CONTENT)
    with logs.open(SHA256) as file:
        assert file.read() == CONTENT
    logs.delete(SHA256)
    assert logs.size(SHA256) is None
    with pytest.raises(BlobMissing):
        logs.open(SHA256)


def test_a_log_as_a_file(blobs: BlobStore, upload: Path, tmp_path: Path) -> None:
    scratch = tmp_path / "scratch"
    scratch.mkdir()
    blobs.put(log_key(SHA256), upload, SHA256)
    with LogStore(blobs).file(SHA256, scratch) as path:
        assert path.read_bytes() == CONTENT
    assert files_in(scratch) == []
    assert content_of(blobs, log_key(SHA256)) == CONTENT


def test_errors_of_the_reader_of_a_file_stay_what_they_are(blobs: BlobStore, upload: Path, tmp_path: Path) -> None:
    blobs.put(log_key(SHA256), upload, SHA256)
    with pytest.raises(InterruptedError), LogStore(blobs).file(SHA256, tmp_path):
        raise InterruptedError


def test_no_file_of_a_log_that_is_missing(blobs: BlobStore, tmp_path: Path) -> None:
    with pytest.raises(BlobMissing), LogStore(blobs).file(SHA256, tmp_path):
        pass
    assert files_in(tmp_path) == []


def test_a_damaged_log_is_told(folder_store: LocalStore, upload: Path, tmp_path: Path) -> None:
    folder_store.put(log_key(SHA256), upload, SHA256)
    kept = folder_store.local_path(log_key(SHA256))
    assert kept is not None
    kept.unlink()
    kept.write_bytes(CONTENT[:-1] + b"\0")
    with pytest.raises(BlobDamaged), LogStore(folder_store).file(SHA256, tmp_path):
        pass


def test_a_log_damaged_in_the_object_store_is_told(
    bucket: str, server: ObjectServer, upload: Path, tmp_path: Path
) -> None:
    logs = open_log_store(bucket)
    logs.put(upload, SHA256)

    def damage(request: Request) -> Response | None:
        if request.method != "GET":
            return None
        answer = server.answer_of_store(request)
        answer.set_data(bytes(len(CONTENT)))
        return answer

    server.trouble = damage
    with pytest.raises(BlobDamaged), logs.file(SHA256, tmp_path):
        pass
    assert files_in(tmp_path) == [upload]


# --- the folder -------------------------------------------------------------------------------------------------------


def test_names_in_the_folder(folder_store: LocalStore, upload: Path, tmp_path: Path) -> None:
    folder_store.put(log_key(SHA256), upload, SHA256)
    folder_store.put(SERIES, upload, SHA256)
    log = tmp_path / "kept" / "logs" / SHA256[:2] / SHA256
    series = tmp_path / "kept" / "series" / "YZ" / "01ABCXYZ.2"
    assert sorted(files_in(tmp_path / "kept")) == [log, series]
    assert (folder_store.local_path(log_key(SHA256)), folder_store.local_path(SERIES)) == (log, series)
    for folder in (path for path in (tmp_path / "kept").rglob("*") if path.is_dir()):
        assert stat.S_IMODE(folder.stat().st_mode) == 0o700


def test_a_log_that_is_there_is_kept_and_counts_as_put_now(
    folder_store: LocalStore, upload: Path, tmp_path: Path
) -> None:
    folder_store.put(log_key(SHA256), upload, SHA256)
    path = folder_store.local_path(log_key(SHA256))
    assert path is not None
    long_ago = time.time() - 1e6
    os.utime(path, (long_ago, long_ago))
    before = path.stat().st_ino
    again = tmp_path / "again"
    again.write_bytes(CONTENT)
    folder_store.put(log_key(SHA256), again, SHA256)
    assert path.stat().st_ino == before
    (kept,) = folder_store.list("logs")
    assert kept.age_s < PATIENCE_S


def test_an_old_file_counts_as_put_now(folder_store: LocalStore, upload: Path) -> None:
    os.utime(upload, (0, 0))
    folder_store.put(log_key(SHA256), upload, SHA256)
    (kept,) = folder_store.list("logs")
    assert kept.age_s < PATIENCE_S


def test_from_another_disk_it_is_copied(
    folder_store: LocalStore, upload: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(os, "link", putting.no_links)
    folder_store.put(log_key(SHA256), upload, SHA256)
    path = folder_store.local_path(log_key(SHA256))
    assert path is not None
    assert path.read_bytes() == CONTENT
    assert path.stat().st_ino != upload.stat().st_ino


def test_killed_before_each_step_leaves_nothing_or_the_whole(tmp_path: Path) -> None:
    seen, outcome, step = set(), -signal.SIGKILL, 0
    while outcome == -signal.SIGKILL:
        folder = tmp_path / str(step)
        folder.mkdir()
        command = [sys.executable, "-m", "tests.storage.putting", str(folder / "kept"), str(folder), str(step)]
        outcome = subprocess.run(command, timeout=PATIENCE_S, check=False).returncode
        path, sha256 = putting.made_file(tmp_path, 1, putting.MIB)
        blobs = LocalStore(folder / "kept")
        kept, left = keys(blobs), len(files_in(folder / "kept"))
        assert kept in (set(), {log_key(sha256)})
        assert blobs.discard_unfinished(-1.0) == left - len(kept)
        if kept:
            assert content_of(blobs, log_key(sha256)) == path.read_bytes()
        # the next attempt finds nothing in its way
        blobs.put(log_key(sha256), path, sha256)
        seen.add((len(kept), left))
        step += 1
    assert outcome == 0
    # nothing at all, a temporary name, the whole
    assert seen == {(0, 0), (0, 1), (1, 1)}
    assert step > 6


def test_the_content_is_safe_before_it_has_its_name_and_the_name_before_it_is_acknowledged(
    folder_store: LocalStore, upload: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    done: list[str] = []
    sync, replace = os.fsync, os.replace

    def seen_sync(number: int) -> None:
        done.append("folder" if stat.S_ISDIR(os.fstat(number).st_mode) else "content")
        sync(number)

    def seen_replace(*names: Any) -> None:
        done.append("name")
        replace(*names)

    monkeypatch.setattr(os, "fsync", seen_sync)
    monkeypatch.setattr(os, "replace", seen_replace)
    folder_store.put(log_key(SHA256), upload, SHA256)
    assert done == ["content", "name", "folder", "folder", "folder"]
    done.clear()
    # another may just have renamed it
    folder_store.put(log_key(SHA256), upload, SHA256)
    assert done == ["folder", "folder", "folder"]


def test_the_sweep_tells_what_was_left_half_put_by_name_and_age(folder_store: LocalStore, upload: Path) -> None:
    folder_store.put(log_key(SHA256), upload, SHA256)
    folder_store.put(SERIES, upload, SHA256)
    path = folder_store.local_path(log_key(SHA256))
    assert path is not None
    old, young, foreign = (path.with_name(name) for name in (f"{UNFINISHED}1", f"{UNFINISHED}2", "notes.txt"))
    for file in (old, young, foreign):
        file.touch()
    for file in (old, foreign, path):
        os.utime(file, (0, 0))
    assert keys(folder_store) == {log_key(SHA256), SERIES}
    assert folder_store.discard_unfinished(3600.0) == 1
    assert not old.exists()
    assert young.exists()
    assert foreign.exists()
    assert keys(folder_store) == {log_key(SHA256), SERIES}


def test_a_full_disk_keeps_nothing_and_is_told(tmp_path: Path) -> None:
    # a limit on the size of files stands for the disk, in a process of its own
    program = (
        "import os, resource, sys; from pathlib import Path\n"
        "from tests.storage import putting; from service.storage.errors import StorageUnavailable\n"
        "from service.storage.log_store import log_key, open_store\n"
        "os.link = putting.no_links; folder = Path(sys.argv[1])\n"
        "path, sha256 = putting.made_file(folder, 1, 1_000_000)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (500_000, 500_000))\n"
        "try: open_store(folder / 'kept').put(log_key(sha256), path, sha256)\n"
        "except StorageUnavailable as error: print(type(error.__cause__).__name__)\n"
    )
    ended = subprocess.run(
        [sys.executable, "-c", program, str(tmp_path)],
        stdout=subprocess.PIPE,
        text=True,
        timeout=PATIENCE_S,
        check=True,
    )
    assert ended.stdout == "OSError\n"
    assert files_in(tmp_path / "kept") == []


def test_a_folder_that_cannot_be_used_is_told_without_its_name(tmp_path: Path, upload: Path) -> None:
    blocked = tmp_path / "blocked"
    blocked.touch()
    store = LocalStore(blocked)
    for call in (
        lambda: store.put(log_key(SHA256), upload, SHA256),
        lambda: store.open(log_key(SHA256)),
        lambda: store.size(log_key(SHA256)),
        lambda: store.delete(log_key(SHA256)),
        lambda: list(store.list("logs")),
        lambda: store.discard_unfinished(0.0),
        store.check_usable,
    ):
        with pytest.raises(StorageUnavailable) as caught:
            call()
        assert not isinstance(caught.value, BlobMissing)
        assert "blocked" not in str(caught.value)


def test_an_upload_that_is_gone_is_no_missing_blob(blobs: BlobStore, tmp_path: Path) -> None:
    with pytest.raises(StorageUnavailable) as caught:
        blobs.put(log_key(SHA256), tmp_path / "gone", SHA256)
    assert not isinstance(caught.value, BlobMissing)


# --- the object store -------------------------------------------------------------------------------------------------


@pytest.fixture
def objects(bucket: str) -> BlobStore:
    return open_store(bucket)


def busy(_request: Request) -> Response:
    return Response("busy", 503)


def refusing(_request: Request) -> Response:
    return Response("<Error><Code>AccessDenied</Code></Error>", 403)


def test_objects_stand_under_the_prefix_by_their_keys(objects: BlobStore, server: ObjectServer, upload: Path) -> None:
    server.forget()
    objects.put(log_key(SHA256), upload, SHA256)
    (put,) = (asked for asked in server.asked if asked.method == "PUT")
    assert put.path.endswith(f"/kept/here/logs/{SHA256}")


def test_an_object_that_is_there_is_not_sent_again(objects: BlobStore, server: ObjectServer, upload: Path) -> None:
    objects.put(log_key(SHA256), upload, SHA256)
    server.forget()
    objects.put(log_key(SHA256), upload, SHA256)
    assert [asked.method for asked in server.asked] == ["HEAD"]


def test_no_log_travels_in_one_piece(objects: BlobStore, server: ObjectServer, tmp_path: Path) -> None:
    size = 20 * putting.MIB
    path, sha256 = putting.made_file(tmp_path, 1, size)
    server.forget()
    objects.put(log_key(sha256), path, sha256)
    with LogStore(objects).file(sha256, tmp_path) as copy:
        assert copy.read_bytes() == path.read_bytes()
    sent = [asked.sent_bytes for asked in server.asked if asked.method == "PUT"]
    fetched = [asked.answered_bytes for asked in server.asked if asked.method == "GET"]
    assert sum(sent) == sum(fetched) == size
    assert max(sent) <= object_store.UPLOAD_PART_BYTES
    assert max(fetched) <= PART_BYTES


def test_a_stream_holds_the_parts_that_were_read_last_and_no_more(
    objects: BlobStore, server: ObjectServer, tmp_path: Path
) -> None:
    size, part = 4 * object_store.CACHE_BYTES, object_store.CACHE_BYTES // 4
    path, sha256 = putting.made_file(tmp_path, 1, size)
    objects.put(log_key(sha256), path, sha256)
    with objects.open(log_key(sha256), part_bytes=part) as file:
        server.forget()
        for start, fetches in ((0, 1), (1000, 0), (part, 1), (0, 0), (4 * part, 1)):
            file.seek(start)
            assert len(file.read(10)) == 10
            assert len(server.asked) == fetches
            server.forget()
        for _ in range(2):
            file.seek(0)
            assert file.read() == path.read_bytes()
        # nearly all of it had to be fetched twice
        assert sum(asked.answered_bytes for asked in server.asked) > 2 * size - 2 * object_store.CACHE_BYTES


def whole(answer: Response) -> None:
    answer.status_code = 200
    answer.set_data(CONTENT)


def another_range(answer: Response) -> None:
    answer.set_data(CONTENT[:50])
    answer.headers["Content-Range"] = f"bytes 0-49/{len(CONTENT)}"


def too_little(answer: Response) -> None:
    answer.set_data(CONTENT[:50])


@pytest.mark.parametrize("wrong", [whole, another_range, too_little])
def test_a_part_that_is_not_what_was_asked_for_is_no_content(
    objects: BlobStore, server: ObjectServer, upload: Path, wrong: Callable[[Response], None]
) -> None:
    objects.put(log_key(SHA256), upload, SHA256)

    def trouble(request: Request) -> Response:
        answer = server.answer_of_store(request)
        if request.method == "GET":
            wrong(answer)
        return answer

    server.trouble = trouble
    with objects.open(log_key(SHA256), part_bytes=1000) as file, pytest.raises(StorageUnavailable):
        file.read()


def test_a_store_that_marks_no_versions(objects: BlobStore, server: ObjectServer, upload: Path) -> None:
    objects.put(log_key(SHA256), upload, SHA256)

    def without_tag(request: Request) -> Response:
        answer = server.answer_of_store(request)
        answer.headers.remove("ETag")
        return answer

    server.trouble = without_tag
    assert content_of(objects, log_key(SHA256)) == CONTENT


def test_a_server_that_is_busy_for_a_moment_is_asked_again(
    objects: BlobStore, server: ObjectServer, upload: Path
) -> None:
    answers = iter([busy, busy])
    server.trouble = lambda request: next(answers, lambda _request: None)(request)
    objects.put(log_key(SHA256), upload, SHA256)
    answers = iter([busy])
    assert content_of(objects, log_key(SHA256)) == CONTENT


def test_an_answer_cut_short_is_fetched_again(objects: BlobStore, server: ObjectServer, upload: Path) -> None:
    objects.put(log_key(SHA256), upload, SHA256)
    cut: list[bool] = []

    def cut_once(request: Request) -> Response | None:
        if request.method != "GET" or cut:
            return None
        cut.append(True)
        whole = server.answer_of_store(request)
        short = Response(iter([CONTENT[:100]]), whole.status_code, headers=whole.headers)
        short.headers["Content-Length"] = str(len(CONTENT))
        return short

    server.trouble = cut_once
    assert content_of(objects, log_key(SHA256)) == CONTENT
    assert cut


@pytest.mark.parametrize("trouble", [busy, refusing])
def test_failures_are_told_without_names(objects: BlobStore, server: ObjectServer, upload: Path, trouble: Any) -> None:
    objects.put(log_key(SHA256), upload, SHA256)
    begun = objects.open(log_key(SHA256))
    server.trouble = trouble
    server.asked.clear()
    calls = (
        lambda: objects.put(SERIES, upload, SHA256),
        lambda: objects.open(log_key(SHA256)),
        lambda: objects.size(log_key(SHA256)),
        lambda: objects.delete(log_key(SHA256)),
        lambda: list(objects.list("logs")),
        lambda: begun.read(),
        objects.check_usable,
    )
    for call in calls:
        with pytest.raises(StorageUnavailable) as caught:
            call()
        assert not isinstance(caught.value, BlobMissing)
        assert "127.0.0.1" not in str(caught.value)
        assert "flights-" not in str(caught.value)
    # tried again, but not without end
    assert len(server.asked) <= len(calls) * (object_store.RETRIES + 1)


def test_a_server_that_does_not_answer(bucket: str, server: ObjectServer, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(object_store, "ASKING_TIMEOUT_S", 0.2)
    monkeypatch.setattr(object_store, "RETRIES", 1)
    asleep = threading.Event()

    def sleep(_request: Request) -> None:
        asleep.wait(PATIENCE_S)

    server.trouble = sleep
    with pytest.raises(StorageUnavailable):
        open_store(bucket).size(log_key(SHA256))
    asleep.set()


def test_a_server_that_comes_back(monkeypatch: pytest.MonkeyPatch, upload: Path) -> None:
    store_of_tests(monkeypatch)
    monkeypatch.setattr(object_store, "RETRIES", 1)
    first = ObjectServer()
    objects = open_store(first.new_bucket())
    objects.put(log_key(SHA256), upload, SHA256)
    first.close()
    for call in (objects.check_usable, lambda: objects.put(SERIES, upload, SHA256)):
        with pytest.raises(StorageUnavailable):
            call()
    second = ObjectServer(first.port)
    assert content_of(objects, log_key(SHA256)) == CONTENT
    objects.put(SERIES, upload, SHA256)
    second.close()


def test_a_bucket_that_is_not_there_is_no_missing_blob(
    server: ObjectServer, monkeypatch: pytest.MonkeyPatch, upload: Path
) -> None:
    store_of_tests(monkeypatch)
    objects = open_store(f"s3://nowhere?endpoint={server.endpoint}")
    for call in (
        lambda: objects.put(log_key(SHA256), upload, SHA256),
        lambda: objects.delete(log_key(SHA256)),
        lambda: list(objects.list("logs")),
        objects.check_usable,
    ):
        with pytest.raises(StorageUnavailable) as caught:
            call()
        assert not isinstance(caught.value, BlobMissing)


def test_a_store_used_before_a_fork_says_so_instead_of_waiting(
    objects: BlobStore, monkeypatch: pytest.MonkeyPatch
) -> None:
    objects.check_usable()
    monkeypatch.setattr(os, "getpid", lambda: -1)
    with pytest.raises(RuntimeError, match="fork"):
        objects.check_usable()


# --- which store ------------------------------------------------------------------------------------------------------


def test_locations(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("AWS_REGION", raising=False)
    whole = place_of("s3://flights/kept/here/?endpoint=http://127.0.0.1:9000&region=eu-central-1")
    assert whole == Place("flights", "kept/here", "http://127.0.0.1:9000", "eu-central-1")
    assert place_of("s3://flights") == Place("flights", "", None, "us-east-1")
    monkeypatch.setenv("AWS_REGION", "eu-west-3")
    assert place_of("s3://flights?endpoint=https%3A%2F%2Fstore").region == "eu-west-3"


@pytest.mark.parametrize(
    "url",
    ["http://hidden/x", "s3:///hidden", "s3://user:hidden@bucket", "s3://hidden:9000/x", "s3://bucket?hidden=1",
     "s3://bucket?endpoint=hidden", "s3://bucket?region=hidden&region=b", "s3://bucket#hidden", "file:///hidden"],
)  # fmt: skip
def test_a_location_that_is_not_known_is_refused_without_being_shown(url: str) -> None:
    with pytest.raises(ValueError, match=r".") as caught:
        open_store(url)
    assert "hidden" not in str(caught.value)


def test_a_path_is_a_folder(tmp_path: Path) -> None:
    for location in (tmp_path, str(tmp_path)):
        assert open_store(location).local_path(SERIES) == tmp_path / "series" / "YZ" / "01ABCXYZ.2"
