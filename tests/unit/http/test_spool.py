"""Uploads on disk: hashed while written, and gone afterwards."""

import hashlib
import os
from pathlib import Path

import pytest

from service.http.failures import NoRoom
from service.http.spool import STALE_S, SpooledFile, check_writable, spooled_file, sweep


def test_written_hashed_and_gone(tmp_path: Path) -> None:
    with spooled_file(tmp_path / "new" / "folder") as file:
        file.write(b"ab" * 50)
        file.write(b"c")
        file.finish()
        assert file.path.read_bytes() == b"ab" * 50 + b"c"
        assert file.sha256 == hashlib.sha256(b"ab" * 50 + b"c").hexdigest()
        assert (file.size, file.head) == (101, b"ab" * 32)
        assert file.path.stat().st_mode & 0o077 == 0
    assert not file.path.exists()


def test_gone_after_a_failure_too(tmp_path: Path) -> None:
    with pytest.raises(ZeroDivisionError), spooled_file(tmp_path):
        _ = 1 / 0
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(NoRoom), spooled_file(tmp_path / "file"):
        pass
    with pytest.raises(NoRoom):
        check_writable(tmp_path / "file" / "deeper")


def test_a_full_disk(tmp_path: Path) -> None:
    with Path("/dev/full").open("wb", buffering=0) as full:
        file = SpooledFile(full, tmp_path)
        with pytest.raises(NoRoom) as caught:
            file.write(b"x")
    assert caught.value.headers == {"Retry-After": "30"}


def test_sweep_takes_only_what_is_old_and_ours(tmp_path: Path) -> None:
    names = ["loiterwise-upload-old", "loiterwise-upload-new", "other-old"]
    for name in names:
        (tmp_path / name).write_text("")
    for name in ("loiterwise-upload-old", "other-old"):
        os.utime(tmp_path / name, (0, os.stat(tmp_path).st_mtime - STALE_S - 60))
    assert sweep(tmp_path) == 1
    assert sorted(path.name for path in tmp_path.iterdir()) == names[1:]


def test_sweep_of_no_folder(tmp_path: Path) -> None:
    assert sweep(tmp_path / "absent") == 0
