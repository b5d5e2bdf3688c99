"""One attempt at one claimed reduction: begin a child, keep the lease, end the child where it must be."""

import os
import signal
import time
from dataclasses import dataclass
from enum import StrEnum

from service.work.children import Child, Nursery
from service.work.lease import Lease
from service.work.order import Answer, Order, Word, answer_of
from service.work.settings import MIB, WorkSettings
from service.work.stop import Stop

BEGIN_WITHIN_S = 60.0
"""For a nursery to load and fork on a busy machine."""


class Cause(StrEnum):
    """Why an attempt came to nothing."""

    MEMORY = "memory"
    TIME = "time"
    KILLED = "killed"
    CRASH = "crash"


@dataclass(frozen=True, slots=True)
class Done:
    answer: Answer


@dataclass(frozen=True, slots=True)
class Wrong:
    """Log or settings are; trying again would end the same."""

    reason: str


@dataclass(frozen=True, slots=True)
class Spent:
    """The attempt is lost and counts."""

    cause: Cause
    reason: str
    """Goes on after "... never came to its end:"."""


@dataclass(frozen=True, slots=True)
class NotNow:
    """Log or series could not be reached, or no process begun: the flight is not to blame, and later it may do."""

    reason: str
    """As in `Spent`."""


@dataclass(frozen=True, slots=True)
class Lost:
    """Cancelled, deleted, in other hands, or the lease is over: nothing of it is to be written."""


@dataclass(frozen=True, slots=True)
class Stopped:
    """The worker stops and the grace is over."""


Outcome = Done | Wrong | Spent | NotNow | Lost | Stopped


def run_job(nursery: Nursery, order: Order, lease: Lease, settings: WorkSettings, stop: Stop) -> Outcome:
    """Carry out `order` in a child; when this returns, the child is gone.

    Heartbeats go from here, so a child that hangs is seen by its time alone. `stop` lets it go on for the grace.
    """
    begun_s = time.monotonic()
    try:
        child = nursery.begin(order)
    except OSError:
        return _not_begun()
    try:
        while not child.ended:
            if (early := _reason_to_end(child, begun_s, lease, settings, stop)) is not None:
                return early
            times = (_last_s(child, begun_s, settings), lease.next_beat_s)
            left_s = min(times) - time.monotonic()
            if (grace_s := stop.grace_left_s(settings.grace_s)) is not None:
                left_s = min(left_s, grace_s)
            stop.wait(max(left_s, 0.0), [child.fileno()])
            child.hear()
        return _outcome(child, settings, stop)
    finally:
        child.kill()


def _reason_to_end(child: Child, begun_s: float, lease: Lease, settings: WorkSettings, stop: Stop) -> Outcome | None:
    if stop.over(settings.grace_s):
        return Stopped()
    if time.monotonic() >= _last_s(child, begun_s, settings):
        return _out_of_time(settings) if child.begun_s is not None else _not_begun()
    if not lease.keep(child.progress):
        return Lost()
    return None


def _last_s(child: Child, begun_s: float, settings: WorkSettings) -> float:
    """The moment up to which it may run; its time counts from its first word."""
    return begun_s + BEGIN_WITHIN_S if child.begun_s is None else child.begun_s + settings.job_seconds


def _outcome(child: Child, settings: WorkSettings, stop: Stop) -> Outcome:
    if child.answer is None:
        # a stop may go to all processes of a group or container, whatever we do
        return Stopped() if stop.is_set() else _died(child, settings)
    word, told = child.answer
    match word:
        case Word.DONE:
            return Done(answer_of(told))
        case Word.WRONG:
            return Wrong(told)
        case Word.NO_STORAGE:
            return NotNow(f"its log or its series could not be reached ({told})")
        case Word.NO_MEMORY:
            return Spent(Cause.MEMORY, f"it needed more than {settings.job_memory_bytes // MIB} MiB of memory")
        case _:
            return Spent(Cause.CRASH, f"it failed within ({told})")


def _died(child: Child, settings: WorkSettings) -> Spent | NotNow:
    """Without saying how it ended."""
    if child.begun_s is None:
        return _not_begun()
    if child.status is None:
        return Spent(Cause.KILLED, "its process was lost")
    code = os.waitstatus_to_exitcode(child.status)
    if code >= 0:
        return Spent(Cause.CRASH, f"its process ended by itself (exit code {code})")
    if code == -signal.SIGALRM:
        return _out_of_time(settings)
    name = signal.Signals(-code).name
    if code == -signal.SIGKILL:
        return Spent(Cause.KILLED, f"its process was killed ({name}), as when the machine runs out of memory")
    return Spent(Cause.CRASH, f"its process crashed ({name})")


def _out_of_time(settings: WorkSettings) -> Spent:
    return Spent(Cause.TIME, f"it took longer than {settings.job_seconds:g} s")


def _not_begun() -> NotNow:
    return NotNow("no process could be begun for it")
