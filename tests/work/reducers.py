"""Reductions that do what the log tells them: sleep, eat memory, crash. They run in the children of the tests.

Such a log is JSON: `{"steps": [[step, value], ...], "marks": path}`. Marks are lines that the child appends to a file.
"""

import json
import os
import signal
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from service.domain.errors import UnreadableInput, WrongValues
from service.domain.results import Reduction
from service.storage.errors import StorageUnavailable
from service.work.nursery import CHANNEL
from tests import made

OBEY = "tests.work.reducers.obey"


def obey(path: Path, *, sha256: str, settings: object, progress: Callable[[float], None]) -> Reduction:
    """Do the steps of the log; then a doubtful result."""
    told = json.loads(path.read_text())
    marks = Path(told["marks"])
    for step, value in told["steps"]:
        _do(step, value, marks, settings, progress)
    reduction = made.reduction()
    return replace(reduction, inputs=replace(reduction.inputs, sha256=sha256))


def _do(step: str, value: Any, marks: Path, settings: object, progress: Callable[[float], None]) -> None:
    match step:
        case "mark":
            mark(marks, value)
        case "mark_settings":
            mark(marks, json.dumps(settings, sort_keys=True))
        case "mark_environment":
            mark(marks, json.dumps(sorted(os.environ)))
        case "mark_threads":
            from threadpoolctl import threadpool_info

            mark(marks, json.dumps([pool["num_threads"] for pool in threadpool_info()]))
        case "progress":
            progress(value)
        case "sleep":
            time.sleep(value)
        case "wait_for":
            while not Path(value).exists():
                time.sleep(0.01)
        case "eat":
            _eat(value)
        case "kill":
            os.kill(os.getpid(), getattr(signal, value))
            time.sleep(600)
        case "speak":
            os.write(CHANNEL, value.encode())
        case "exit":
            os._exit(value)
        case "raise":
            raise {"unreadable": UnreadableInput("No such log."), "bug": TypeError("a bug")}[value]
        case "want_of_memory":
            raise OSError("a library's own error") from MemoryError()
        case "wrong_values":
            raise WrongValues("The settings are wrong.", {f"/settings/{number}": "is wrong" for number in range(value)})
        case "need":
            if not Path(value).exists():
                raise StorageUnavailable("The store is away.")
        case _:
            raise AssertionError(step)


def _eat(mib: int) -> None:
    """Memory that is really used, in pieces."""
    eaten = [np.ones(1024 * 1024 // 8) for _ in range(mib)]
    assert len(eaten) == mib


def mark(marks: Path, text: str) -> None:
    """One line, in one write: children of several processes share the file."""
    with marks.open("ab", buffering=0) as file:
        file.write(f"{os.getpid()} {text}\n".encode())
