"""Processes that a supervisor starts: `python -m service.work worker` and `... sweep`.

Their settings come as one line on standard input, for they hold passwords; its end is the end of the supervisor.
"""

import os
import signal
import sys

from service.work.settings import WorkSettings
from service.work.stop import Stop

INPUT = 0


def main(task: str) -> None:
    """Do `task` until it is done or the supervisor is gone."""
    settings = WorkSettings.from_line(_first_line())
    if task == "worker":
        from service.work.worker import work

        stop = Stop(INPUT)
        stop.on_signals()
        work(settings, stop)
    else:
        from service.work.sweep import sweep_in_background

        # from a terminal, to the whole group: nothing to report
        signal.signal(signal.SIGINT, signal.SIG_DFL)
        sweep_in_background(settings)


def _first_line() -> bytes:
    """Read without a buffer: nothing that comes later may be lost in it."""
    line = b""
    while not line.endswith(b"\n") and (sign := os.read(INPUT, 1)):
        line += sign
    return line


if __name__ == "__main__":
    main(sys.argv[1])
