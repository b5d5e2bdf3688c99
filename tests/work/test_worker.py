"""The loop of a worker: what becomes of each job, and what it does while the database is away."""

from typing import Any

import pytest
from sqlalchemy import text

from service.domain.kept import Claim, JobState
from service.storage import engine as engine_module
from service.storage.engine import open_engine, writing
from service.storage.errors import StorageUnavailable
from service.storage.jobs import JobQueue
from service.work import worker as worker_module
from service.work.children import Nursery
from service.work.run_job import Lost, NotNow, Spent
from service.work.stop import Stop
from service.work.worker import Worker
from tests.storage.conftest import POSTGRESQL, SQLITE
from tests.storage.postgresql_server import running_server
from tests.work.workshop import OWNER, Workshop, lives, meanwhile, wait_until, working

ON_BOTH = pytest.mark.parametrize("database", [SQLITE, POSTGRESQL])


@pytest.fixture
def database() -> str:
    return SQLITE


def closed(workshop: Workshop, *flights: str) -> bool:
    return all(workshop.job(flight).state not in (JobState.QUEUED, JobState.RUNNING) for flight in flights)


@ON_BOTH
def test_jobs_are_done_in_turn(workshop: Workshop, nursery: Nursery) -> None:
    flights = [workshop.add(("mark", str(number))) for number in range(3)]
    with working(workshop, nursery):
        wait_until(lambda: closed(workshop, *flights))
    assert [mark for _, mark in workshop.marked() if mark.isdigit()] == ["0", "1", "2"]
    for flight in flights:
        job = workshop.job(flight)
        assert (job.state, job.attempts, job.progress) == (JobState.DONE, 1, 1.0)
        assert (job.verdict, job.series_key) == ("doubtful", f"series/{flight}/1")
        assert job.summary is not None
        assert job.summary["calibration"]["verdict"] == "doubtful"
    assert workshop.flight(flights[0]).flown_utc.isoformat() == "2026-05-04T09:12:00+00:00"


@ON_BOTH
def test_a_log_that_breaks_every_child_fails_with_a_reason_and_the_next_is_done(
    workshop: Workshop, nursery: Nursery
) -> None:
    poison, sound = workshop.add(("kill", "SIGSEGV")), workshop.add()
    with working(workshop, nursery):
        wait_until(lambda: closed(workshop, poison, sound))
    job = workshop.job(poison)
    assert (job.state, job.attempts) == (JobState.FAILED, 3)
    assert job.failure is not None
    assert "3 times" in job.failure
    assert "its process crashed (SIGSEGV)" in job.failure
    assert workshop.job(sound).state is JobState.DONE


def test_a_log_that_cannot_be_read_fails_at_once(workshop: Workshop, nursery: Nursery) -> None:
    flight = workshop.add(("raise", "unreadable"))
    with working(workshop, nursery):
        wait_until(lambda: closed(workshop, flight))
    job = workshop.job(flight)
    assert (job.state, job.attempts, job.failure) == (JobState.FAILED, 1, "No such log.")


def test_a_store_that_comes_back_costs_no_attempt(
    workshop: Workshop, nursery: Nursery, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(worker_module, "AWAY_S", (0.1, 0.2))
    store = workshop.folder / "store"
    flight = workshop.add(("need", str(store)))
    with working(workshop, nursery, lease_s=0.3):
        # more than a lease later, and it is still ours
        workshop.wait_for_mark("begun", 4)
        assert workshop.job(flight).state is JobState.RUNNING
        store.touch()
        wait_until(lambda: closed(workshop, flight))
    job = workshop.job(flight)
    assert (job.state, job.attempts) == (JobState.DONE, 1)


def test_a_store_that_does_not_come_back_costs_an_attempt(
    workshop: Workshop, nursery: Nursery, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(worker_module, "NOT_NOW_PATIENCE_S", 0.0)
    flight = workshop.add(("need", str(workshop.folder / "store")))
    worker = Worker("tester", workshop.queue, nursery, workshop.settings, Stop())
    assert isinstance(worker.do(workshop.claim()), NotNow)
    assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.QUEUED, 1)


def test_a_job_held_for_the_store_can_be_cancelled(workshop: Workshop, nursery: Nursery) -> None:
    flight = workshop.add(("need", str(workshop.folder / "store")))
    worker = Worker("tester", workshop.queue, nursery, workshop.settings, Stop())
    claim = workshop.claim()

    def cancel() -> None:
        workshop.wait_for_mark()
        workshop.queue.cancel(OWNER, flight)

    with meanwhile(cancel):
        assert worker.do(claim) == Lost()
    assert workshop.job(flight).state is JobState.CANCELLED


def test_a_stop_lets_a_job_end_within_the_grace(workshop: Workshop, nursery: Nursery) -> None:
    go_on = workshop.folder / "go on"
    first, second = workshop.add(("wait_for", str(go_on))), workshop.add()
    with working(workshop, nursery) as stop:
        workshop.wait_for_mark()
        stop.set()
        go_on.touch()
    assert workshop.job(first).state is JobState.DONE
    assert workshop.job(second).state is JobState.QUEUED


def test_after_the_grace_a_job_goes_back_and_the_attempt_does_not_count(workshop: Workshop, nursery: Nursery) -> None:
    flight = workshop.add(("sleep", 600))
    with working(workshop, nursery, grace_s=0.1):
        child = workshop.wait_for_mark()
    assert not lives(child)
    assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.QUEUED, 0)


def test_a_bug_of_the_worker_ends_the_job_and_not_the_worker(
    workshop: Workshop, nursery: Nursery, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_arguments: object) -> None:
        raise ZeroDivisionError

    monkeypatch.setattr(worker_module, "run_job", broken)
    monkeypatch.setattr(worker_module, "BUG_PAUSE_S", 0.0)
    flight = workshop.add()
    outcome = Worker("tester", workshop.queue, nursery, workshop.settings, Stop()).do(workshop.claim())
    assert isinstance(outcome, Spent)
    assert workshop.job(flight).state is JobState.QUEUED


class ShyQueue(JobQueue):
    """Away when told so."""

    away = False
    unfinished = 0
    """Results that it did not take."""

    def claim(self, worker: str, lease_s: float, *, only: tuple[str, int] | None = None) -> Claim | None:
        self._answer()
        return super().claim(worker, lease_s, only=only)

    def heartbeat(self, claim: Claim, progress: float) -> bool:
        self._answer()
        return super().heartbeat(claim, progress)

    def finish(self, claim: Claim, **result: Any) -> bool:
        self.unfinished += self.away
        self._answer()
        return super().finish(claim, **result)

    def _answer(self) -> None:
        if self.away:
            raise StorageUnavailable("away")


class CountingQueue(JobQueue):
    refused = 0

    def claim(self, worker: str, lease_s: float, *, only: tuple[str, int] | None = None) -> Claim | None:
        try:
            return super().claim(worker, lease_s, only=only)
        except StorageUnavailable:
            self.refused += 1
            raise


def test_a_result_waits_for_the_database(workshop: Workshop, nursery: Nursery) -> None:
    """Even beyond its lease, as long as nobody else has claimed it."""
    go_on = workshop.folder / "go on"
    flight = workshop.add(("wait_for", str(go_on)))
    queue = ShyQueue(workshop.engine)
    with working(workshop, nursery, queue, lease_s=600.0):
        workshop.wait_for_mark("begun")
        queue.away = True
        go_on.touch()
        wait_until(lambda: queue.unfinished > 1)
        with writing(workshop.engine) as connection:
            connection.execute(text("UPDATE reductions SET lease_until_s = 1"))
        assert workshop.job(flight).state is JobState.RUNNING
        queue.away = False
        wait_until(lambda: closed(workshop, flight))
    assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.DONE, 1)


def test_a_stop_while_the_database_is_away_waits_no_longer_than_the_grace(workshop: Workshop, nursery: Nursery) -> None:
    go_on = workshop.folder / "go on"
    flight = workshop.add(("wait_for", str(go_on)))
    queue = ShyQueue(workshop.engine)
    with working(workshop, nursery, queue, grace_s=0.3, lease_s=600.0):
        workshop.wait_for_mark("begun")
        queue.away = True
        go_on.touch()
        wait_until(lambda: queue.unfinished)
    # nothing is lost: the lease runs out, and another does it
    assert workshop.job(flight).state is JobState.RUNNING


def test_a_database_that_is_locked(workshop: Workshop, nursery: Nursery, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(engine_module, "WAIT_S", 0)
    impatient = CountingQueue(open_engine(workshop.settings.database))
    flight = workshop.add()
    with writing(workshop.engine) as connection:
        connection.execute(text("UPDATE flights SET log_media_type = 'text/csv'"))
        with working(workshop, nursery, impatient):
            wait_until(lambda: impatient.refused > 1)
            connection.commit()
            wait_until(lambda: closed(workshop, flight))
    assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.DONE, 1)


@pytest.mark.parametrize("database", [POSTGRESQL])
def test_a_server_that_goes_away_and_returns(workshop: Workshop, nursery: Nursery) -> None:
    """Idle, in the middle of a job, and when its result is there: the same worker goes on."""
    go_on = workshop.folder / "go on"
    flight = workshop.add(("wait_for", str(go_on)))
    with working(workshop, nursery, lease_s=30.0):
        workshop.wait_for_mark("begun")
        running_server().stop()
        try:
            go_on.touch()
            workshop.wait_for_mark("ended")
        finally:
            running_server().start()
        wait_until(lambda: closed(workshop, flight))
        assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.DONE, 1)
        another = workshop.add()
        wait_until(lambda: closed(workshop, another))
    assert workshop.job(another).state is JobState.DONE
