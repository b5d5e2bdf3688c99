"""The workers of one machine: start them, start those again that die, stop them all.

The supervisor does nothing else that could fail. A worker sees by its standard input when the supervisor is gone, and
stops; so nothing is left behind, however it ends.
"""

import ctypes
import logging
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import suppress

from service.log_lines import ROOT, log_to_stderr
from service.work.backoff import Backoff
from service.work.limits import SET_PARENT_DEATH_SIGNAL
from service.work.settings import WorkSettings
from service.work.stop import Stop

LOOK_EVERY_S = 0.2
RESTART_S = (0.5, 30.0)
"""Pause before a worker that died is started again, at first and at most."""
SOUND_S = 30.0
"""A worker that lived so long was sound: its death says nothing about the next."""
BEYOND_GRACE_S = 5.0
"""What a worker needs to tidy up when the grace is over."""
SERVER_GRACE_S = 35.0
"""The HTTP server lets requests go on for half a minute."""
FIRST_SWEEP = (0.02, 0.1)
"""Of the time between sweeps, at random: the first comes soon, but not among the starts."""

_log = logging.getLogger(ROOT)


def supervise(settings: WorkSettings, *, beside: Sequence[str] | None = None, stop: Stop | None = None) -> int:
    """Keep `settings.workers` workers at work until told to stop, and sweep once in a while; returns an exit code.

    Call it in the main thread: without a `stop` of the caller's, SIGTERM and SIGINT are heard.

    Parameters
    ----------
    beside : a command that runs along, as the HTTP server does. When it ends, all ends, and its exit code is returned.
    """
    log_to_stderr(settings.log_level)
    if stop is None:
        stop = Stop()
        stop.on_signals()
    programs: list[_Program] = [_Worker(settings) for _ in range(settings.workers)]
    programs.append(_Sweeper(settings))
    server = None if beside is None else subprocess.Popen(beside, preexec_fn=_ask_to_end_with_parent)
    try:
        while not stop.is_set() and (server is None or server.poll() is None):
            for program in programs:
                program.look_after()
            bury_strangers([program.pid for program in programs] + [server.pid if server else None])
            stop.wait(LOOK_EVERY_S)
    finally:
        limits_s = {program.process: settings.grace_s + BEYOND_GRACE_S for program in programs}
        _end({process: limit_s for process, limit_s in {**limits_s, server: SERVER_GRACE_S}.items() if process})
    return 0 if server is None else _exit_code(server.returncode)


class _Program:
    """A process that is started again and again."""

    def __init__(self, settings: WorkSettings, task: str, first_s: float) -> None:
        self._settings = settings
        self._task = task
        self._start_s = time.monotonic() + first_s
        self._begun_s = 0.0
        self.process: subprocess.Popen[bytes] | None = None

    @property
    def pid(self) -> int | None:
        return None if self.process is None else self.process.pid

    def look_after(self) -> None:
        """Start it when its time has come; see whether it has ended."""
        if self.process is not None:
            if (code := self.process.poll()) is not None:
                _close(self.process)
                self.process = None
                self._start_s = time.monotonic() + self._pause_s(code, time.monotonic() - self._begun_s)
        elif time.monotonic() >= self._start_s:
            self._begun_s = time.monotonic()
            try:
                self.process = _started(self._task, self._settings)
            except OSError as error:
                # no memory or processes left just now
                _log.error("a process cannot be started", exc_info=error, extra={"fields": {"task": self._task}})
                self._start_s = self._begun_s + RESTART_S[1]

    def _pause_s(self, code: int, lived_s: float) -> float:
        """Until the next start, now that it has ended."""
        raise NotImplementedError


class _Worker(_Program):
    def __init__(self, settings: WorkSettings) -> None:
        super().__init__(settings, "worker", 0.0)
        self._restart = Backoff(*RESTART_S)

    def _pause_s(self, code: int, lived_s: float) -> float:
        if lived_s > SOUND_S:
            self._restart.reset()
        pause_s = self._restart.next_s()
        fields = {"exit_code": code, "lived_s": round(lived_s, 1), "again_in_s": round(pause_s, 1)}
        _log.error("a worker died", extra={"fields": fields})
        return pause_s


class _Sweeper(_Program):
    def __init__(self, settings: WorkSettings) -> None:
        # machines that were started together need not sweep together
        super().__init__(settings, "sweep", settings.sweep_every_s * random.uniform(*FIRST_SWEEP))

    def _pause_s(self, code: int, lived_s: float) -> float:
        if code:
            _log.error("a sweep failed", extra={"fields": {"exit_code": code}})
        return max(0.0, self._settings.sweep_every_s - lived_s)


def _started(task: str, settings: WorkSettings) -> "subprocess.Popen[bytes]":
    process = subprocess.Popen([sys.executable, "-m", "service.work", task], stdin=subprocess.PIPE)
    assert process.stdin is not None
    # it may have died already, which is found out later
    with suppress(BrokenPipeError):
        process.stdin.write(settings.to_line())
        process.stdin.flush()
    return process


def _end(limits_s: Mapping["subprocess.Popen[bytes]", float]) -> None:
    """Ask all to stop, and end those that have not done so within their time."""
    for process in limits_s:
        process.terminate()
    asked_s = time.monotonic()
    for process, limit_s in sorted(limits_s.items(), key=lambda pair: pair[1]):
        try:
            process.wait(max(asked_s + limit_s - time.monotonic(), 0.0))
        except subprocess.TimeoutExpired:
            _log.error("a process did not stop in time", extra={"fields": {"pid": process.pid}})
            process.kill()
            process.wait()
        _close(process)


def _close(process: "subprocess.Popen[bytes]") -> None:
    if process.stdin is not None:
        with suppress(OSError):
            process.stdin.close()


def _ask_to_end_with_parent() -> None:
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(SET_PARENT_DEATH_SIGNAL, signal.SIGTERM)


def bury_strangers(own: Sequence[int | None]) -> None:
    """As the first process of a container we inherit the children of workers that were killed."""
    if os.getpid() != 1:
        return
    with suppress(ChildProcessError):
        while (ended := os.waitid(os.P_ALL, 0, os.WEXITED | os.WNOHANG | os.WNOWAIT)) and ended.si_pid not in own:
            os.waitpid(ended.si_pid, 0)


def _exit_code(code: int) -> int:
    """As a shell gives it: a signal is 128 and its number."""
    return code if code >= 0 else 128 - code
