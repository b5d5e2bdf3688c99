"""Workers and supervisors as processes of their own, which end with the test run whatever becomes of it."""

import subprocess
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager

from service.work import supervise as module
from service.work.settings import WorkSettings
from service.work.stop import Stop
from tests.work.workshop import PATIENCE_S, descendants, lives, wait_until

Process = subprocess.Popen[bytes]


@contextmanager
def worker(settings: WorkSettings) -> Iterator[Process]:
    """One worker, as a supervisor starts it."""
    with _started([sys.executable, "-W", "error", "-m", "service.work", "worker"], settings) as process:
        yield process


@contextmanager
def supervisor(settings: WorkSettings, *beside: str) -> Iterator[Process]:
    """A supervisor with its workers, and a command that runs along."""
    with _started([sys.executable, "-W", "error", "-m", __name__, *beside], settings) as process:
        yield process


@contextmanager
def _started(command: Sequence[str], settings: WorkSettings) -> Iterator[Process]:
    process = subprocess.Popen(command, stdin=subprocess.PIPE)
    assert process.stdin is not None
    process.stdin.write(settings.to_line())
    process.stdin.flush()
    try:
        yield process
    finally:
        # those whose supervisor is killed see to their end themselves, which is what some tests are about
        process.kill()
        process.wait()
        process.stdin.close()


def wait_for_end(process: Process) -> int:
    """Its exit code."""
    return process.wait(PATIENCE_S)


def wait_for_family(process: Process, count: int) -> list[int]:
    """Pids of all that came from it, once they are at least `count`."""
    wait_until(lambda: len(descendants(process.pid)) >= count)
    return descendants(process.pid)


def wait_until_gone(pids: Sequence[int]) -> None:
    wait_until(lambda: not any(lives(pid) for pid in pids))


def main(beside: Sequence[str]) -> None:
    # the tests kill sound workers: waiting before a restart would show nothing
    module.RESTART_S = (0.05, 0.2)
    settings = WorkSettings.from_line(sys.stdin.buffer.raw.readline())  # type: ignore[union-attr]
    stop = Stop(sys.stdin.fileno())
    stop.on_signals()
    sys.exit(module.supervise(settings, beside=beside or None, stop=stop))


if __name__ == "__main__":
    main(sys.argv[1:])
