"""What a child may take, and that it does not outlive those who wait for it. Called in the child itself.

Linux keeps all of it; elsewhere the alarm alone does.
"""

import ctypes
import os
import resource
import signal
import sys
from contextlib import suppress
from math import ceil
from pathlib import Path

SET_PARENT_DEATH_SIGNAL = 1
"""PR_SET_PDEATHSIG of prctl(2)."""
ALARM_AFTER_S = 5
"""The worker ends a child whose time is over; if it cannot, the child's own alarm does, so much later."""
LONGEST_ALARM_S = 10**9
FIRST_TO_GO = "500"
"""Where the machine runs out of memory, a child goes before the processes that serve. Out of 1000; own choice."""


def end_with_parent(parent: int) -> None:
    """The kernel kills this process when the process `parent`, which started it, ends in whatever way.

    It is the *thread* that started it that counts: start from one that stays.
    """
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(SET_PARENT_DEATH_SIGNAL, signal.SIGKILL)
    if os.getppid() != parent:
        # it ended before we asked
        os._exit(1)


def limit(seconds: float, memory_bytes: int) -> None:
    """Limit this process to `memory_bytes` beyond what it holds now, and to `seconds` if nobody else ends it."""
    signal.signal(signal.SIGALRM, signal.SIG_DFL)
    signal.alarm(min(ceil(seconds) + ALARM_AFTER_S, LONGEST_ALARM_S))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    _, most = resource.getrlimit(resource.RLIMIT_AS)
    with suppress(OSError, ValueError):
        Path("/proc/self/oom_score_adj").write_text(FIRST_TO_GO)
    if (held := _address_space_bytes()) is not None:
        # the soft limit alone, so that it can be lifted again to say what happened
        resource.setrlimit(resource.RLIMIT_AS, (_lower(held + memory_bytes, most), most))


def lift_memory_limit() -> None:
    """Memory ran out: what is left to do (saying so) may take a little more."""
    _, most = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (most, most))


def _lower(wanted: int, most: int) -> int:
    return min(wanted, sys.maxsize if most == resource.RLIM_INFINITY else most)


def _address_space_bytes() -> int | None:
    """What this process has mapped; None where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text().split()[0])
    except OSError:
        return None
    return pages * resource.getpagesize()
