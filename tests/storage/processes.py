"""Other processes that use a database at the same time.

A program of its own forks them when it has imported everything: so they begin together, and share nothing with the
tests.
"""

import json
import os
import subprocess
import sys
import traceback
from collections.abc import Callable, Sequence

from sqlalchemy import URL

from service.storage.engine import open_engine
from service.storage.flights import FlightStore
from service.storage.idempotency import Once
from service.storage.jobs import JobQueue
from service.storage.migrate import bring_up_to_date
from tests.storage.kept_things import OWNER, finish, new_flight

PATIENCE_S = 120


def at_once(processes: int, task: str, url: URL) -> list[object]:
    """What each of several processes gives, begun together. Fails if one does."""
    shown = url.render_as_string(hide_password=False)
    command = [sys.executable, "-W", "error", "-m", __name__, str(processes), task, shown]
    ended = subprocess.run(command, stdout=subprocess.PIPE, text=True, timeout=PATIENCE_S, check=True)
    given = [json.loads(line) for line in ended.stdout.splitlines()]
    assert len(given) == processes
    return given


def add_and_work(url: str) -> object:
    """Add flights under ten keys that the others use, too, then do jobs until none is left.

    Gives (flight, whether it was new) of each key, and the flights whose job was done.
    """
    engine = open_engine(url)
    store, queue = FlightStore(engine), JobQueue(engine)
    added = [store.add(OWNER, new_flight(f"log {key}"), once=Once(f"key {key}", "0" * 64)) for key in range(10)]
    done = []
    while claim := queue.claim("a process", 60.0):
        assert queue.heartbeat(claim, 0.5)
        assert finish(engine, claim)
        done.append(claim.flight_id)
    return {"added": [(flight.flight_id, is_new) for flight, is_new in added], "done": done}


def migrate(url: str) -> object:
    bring_up_to_date(url)
    return True


TASKS: dict[str, Callable[[str], object]] = {"add and work": add_and_work, "migrate": migrate}


def main(arguments: Sequence[str]) -> int:
    processes, task, url = int(arguments[0]), TASKS[arguments[1]], arguments[2]
    started, start = os.pipe()
    children = []
    for _ in range(processes):
        child = os.fork()
        if child == 0:
            os.close(start)
            os.read(started, 1)
            os._exit(run(task, url))
        children.append(child)
    # all of them wait for the pipe to close
    os.close(start)
    return max(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) for child in children)


def run(task: Callable[[str], object], url: str) -> int:
    try:
        os.write(1, f"{json.dumps(task(url))}\n".encode())
    except BaseException:
        traceback.print_exc()
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
