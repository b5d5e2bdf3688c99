"""What the tests of the work share: flights to reduce, marks that children leave, processes to look for."""

import hashlib
import json
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from threading import Thread
from typing import Any

from sqlalchemy import Engine

from service.domain.kept import Claim, FlightRecord, NewFlight, ReductionRecord
from service.storage.blobs import BlobStore
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue
from service.storage.log_store import LogStore
from service.work.children import Nursery
from service.work.settings import WorkSettings
from service.work.stop import Stop
from service.work.worker import Worker

OWNER = "north field"
PATIENCE_S = 30.0
"""Longer than any test waits on a busy machine; nothing is measured by it."""


@dataclass(frozen=True, slots=True)
class Workshop:
    """A data folder with its database, and the settings of workers for it."""

    folder: Path
    engine: Engine
    settings: WorkSettings
    blobs: BlobStore

    @property
    def flights(self) -> FlightStore:
        return FlightStore(self.engine)

    @property
    def queue(self) -> JobQueue:
        return JobQueue(self.engine, self.settings.job_attempts)

    @property
    def marks(self) -> Path:
        return self.folder / "marks"

    def add(self, *steps: tuple[str, Any], settings: dict[str, Any] | None = None, aircraft: str | None = None) -> str:
        """A flight whose log holds these steps; its id."""
        told = {"steps": [["mark", "begun"], *steps, ["mark", "ended"]], "marks": str(self.marks)}
        return self.add_log(json.dumps(told).encode(), settings=settings, aircraft=aircraft)

    def add_log(self, log: bytes, *, settings: dict[str, Any] | None = None, aircraft: str | None = None) -> str:
        sha256 = hashlib.sha256(log).hexdigest()
        upload = self.folder / "upload"
        upload.write_bytes(log)
        LogStore(self.blobs).put(upload, sha256)
        upload.unlink()
        new = NewFlight(sha256, len(log), "application/json", settings or {}, aircraft)
        return self.flights.add(OWNER, new)[0].flight_id

    def claim(self) -> Claim:
        claim = self.queue.claim("a worker", self.settings.lease_s)
        assert claim is not None
        return claim

    def flight(self, flight_id: str) -> FlightRecord:
        return self.flights.get(OWNER, flight_id)

    def job(self, flight_id: str) -> ReductionRecord:
        return self.flight(flight_id).latest

    def marked(self) -> list[tuple[int, str]]:
        """(pid of the child, its text), in the order left."""
        if not self.marks.exists():
            return []
        lines = [line.split(" ", 1) for line in self.marks.read_text().splitlines()]
        return [(int(pid), text) for pid, text in lines]

    def wait_for_mark(self, text: str = "begun", count: int = 1) -> int:
        """Pid of the child that left the mark for the `count`-th time."""
        wait_until(lambda: [mark for _, mark in self.marked()].count(text) >= count)
        return [pid for pid, mark in self.marked() if mark == text][count - 1]


def wait_until(true: Callable[[], object]) -> None:
    until_s = time.monotonic() + PATIENCE_S
    while not true():
        assert time.monotonic() < until_s, "it never came"
        time.sleep(0.01)


@contextmanager
def meanwhile(action: Callable[[], object]) -> Iterator[None]:
    """Another thread does `action`; what it raises is raised at the end."""
    failures: list[BaseException] = []

    def run() -> None:
        try:
            action()
        except BaseException as error:
            failures.append(error)

    thread = Thread(target=run)
    thread.start()
    try:
        yield
    finally:
        thread.join()
    if failures:
        raise failures[0]


@contextmanager
def working(workshop: Workshop, nursery: Nursery, queue: JobQueue | None = None, **settings: Any) -> Iterator[Stop]:
    """A worker in a thread of its own, until the end of the block."""
    stop = Stop()
    worker = Worker("tester", queue or workshop.queue, nursery, replace(workshop.settings, **settings), stop)
    with meanwhile(worker.run):
        try:
            yield stop
        finally:
            stop.set()
    stop.close()


def parent_of(pid: int) -> int:
    return int(Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[1])


def lives(pid: int) -> bool:
    """Zombies do not: they wait only for somebody to take note of them."""
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
    except (FileNotFoundError, ProcessLookupError):
        return False
    return state not in "ZX"


def descendants(pid: int) -> list[int]:
    """All processes that came from `pid`, by way of others too."""
    parents: dict[int, int] = {}
    for folder in Path("/proc").iterdir():
        if folder.name.isdigit():
            try:
                parents[int(folder.name)] = parent_of(int(folder.name))
            except (FileNotFoundError, ProcessLookupError):
                continue
    found = [pid]
    for parent in found:
        found += [child for child, its_parent in parents.items() if its_parent == parent]
    return found[1:]
