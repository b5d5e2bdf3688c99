"""A program that puts blobs and may be killed at it: `python -m tests.storage.putting LOCATION FOLDER [STEP]`.

It puts one file after the other, each of another content, and writes a line for each that was acknowledged. With a STEP
it kills itself before that step of a single put, steps being the calls that change or secure something on the disk.
Files get no second names, as where uploads rest on another disk: copying takes time in which to be killed.
"""

import errno
import hashlib
import os
import shutil
import signal
import sys
from collections.abc import Sequence
from itertools import count
from pathlib import Path
from typing import Any

from service.storage.blobs import content_name
from service.storage.log_store import log_key, open_store
from service.storage.series_store import series_key

MIB = 1024 * 1024
STEPS = ((os, "mkdir"), (shutil, "copyfile"), (os, "fsync"), (os, "replace"), (os, "unlink"))


def made_file(folder: Path, number: int, size: int) -> tuple[Path, str]:
    """A file to put, and its SHA-256."""
    content = (f"{number} " * 1000).encode().ljust(size, bytes([number % 256]))
    path = folder / f"to put {number}"
    path.write_bytes(content)
    return path, hashlib.sha256(content).hexdigest()


def key_of(number: int, sha256: str) -> str:
    """Logs and series by turns."""
    return log_key(sha256) if number % 2 else series_key("FLIGHT", number)


def no_links(*_arguments: Any) -> None:
    raise OSError(errno.EXDEV, "no second name on another disk")


def kill_before(step: int) -> None:
    """Let this process be killed when it comes to a step."""
    passed = count()

    def counted(module: Any, name: str) -> None:
        real = getattr(module, name)

        def call(*arguments: Any, **named: Any) -> Any:
            if next(passed) == step:
                os.kill(os.getpid(), signal.SIGKILL)
            return real(*arguments, **named)

        setattr(module, name, call)

    for module, name in STEPS:
        counted(module, name)


def main(arguments: Sequence[str]) -> int:
    location, folder = arguments[0], Path(arguments[1])
    os.link = no_links  # type: ignore[assignment]
    blobs = open_store(location)
    if len(arguments) > 2:
        path, sha256 = made_file(folder, 1, MIB)
        kill_before(int(arguments[2]))
        blobs.put(log_key(sha256), path, sha256)
        return 0
    for number in count():
        path, sha256 = made_file(folder, number, 12 * MIB)
        key = key_of(number, sha256)
        blobs.put(key, path, sha256)
        assert content_name(key) in (None, sha256)
        print(key, sha256, flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
