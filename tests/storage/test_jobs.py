"""Every job ends once, whoever works on it, dies at it, or comes back too late; whatever the clock does."""

from collections import Counter
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from itertools import chain

import pytest
from sqlalchemy import Connection, Engine, select

from service.domain.kept import JobState, ReductionRecord
from service.storage import jobs
from service.storage.aircraft import AircraftStore
from service.storage.engine import writing
from service.storage.errors import NotKept
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue
from service.storage.tables import reductions
from tests.storage.conftest import SQLITE
from tests.storage.kept_things import FLOWN, OWNER, add_flight, claimed, finish, sha256_of

LEASE_S = 30.0
CALLS: dict[str, Callable[[JobQueue, jobs.Claim], object]] = {
    "heartbeat": lambda queue, claim: queue.heartbeat(claim, 0.9),
    "fail": lambda queue, claim: queue.fail(claim, "whatever"),
    "try again": lambda queue, claim: queue.try_again(claim, "whatever") is not None,
    "release": lambda queue, claim: queue.release(claim),
}


class Clock:
    """The database's clock, as the tests move it."""

    def __init__(self) -> None:
        self.now_s = 1_800_000_000.0

    def __call__(self, _connection: Connection) -> float:
        return self.now_s


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    moved = Clock()
    monkeypatch.setattr(jobs, "database_seconds", moved)
    return moved


@pytest.fixture
def queue(engine: Engine) -> JobQueue:
    return JobQueue(engine)


@pytest.fixture
def flight_id(engine: Engine) -> str:
    return add_flight(engine).flight_id


def job(engine: Engine, flight_id: str) -> ReductionRecord:
    return FlightStore(engine).get(OWNER, flight_id).latest


def test_a_claim_carries_what_the_work_needs(queue: JobQueue, engine: Engine) -> None:
    AircraftStore(engine).put(OWNER, "kite 7", {"aircraft": {"mass_kg": 6.0}})
    flight = add_flight(engine, aircraft="kite 7", settings={"loiters": []})
    # what changes after the request does not change the job
    AircraftStore(engine).put(OWNER, "kite 7", {"aircraft": {"mass_kg": 9.0}})
    claim = claimed(engine)
    assert (claim.flight_id, claim.number) == (flight.flight_id, 1)
    assert (claim.log_sha256, claim.log_media_type) == (sha256_of("a log"), "text/csv")
    assert claim.settings == {"loiters": []}
    assert claim.request_aircraft_profile == {"aircraft": {"mass_kg": 6.0}}
    assert claim.fence == 1
    running = job(engine, flight.flight_id)
    assert (running.state, running.attempts, running.progress) == (JobState.RUNNING, 1, 0.0)
    assert queue.claim("another", LEASE_S) is None


def test_the_oldest_comes_first(queue: JobQueue, engine: Engine) -> None:
    waiting = [(add_flight(engine, f"log {number}").flight_id, 1) for number in range(3)]
    assert queue.queued() == tuple(waiting)
    assert queue.queued(limit=2) == tuple(waiting[:2])
    assert queue.depth() == 3
    taken = [claimed(engine) for _ in waiting]
    assert [(claim.flight_id, claim.number) for claim in taken] == waiting
    assert queue.depth() == 0


def test_one_job_can_be_asked_for(queue: JobQueue, engine: Engine) -> None:
    first, second = (add_flight(engine, log).flight_id for log in ("log 1", "log 2"))
    claim = queue.claim("a worker", LEASE_S, only=(second, 1))
    assert claim is not None
    assert claim.flight_id == second
    # a message that comes twice or too late
    assert queue.claim("a worker", LEASE_S, only=(second, 1)) is None
    assert queue.claim("a worker", LEASE_S, only=(first, 2)) is None


def test_a_finished_job_holds_its_result(engine: Engine, flight_id: str) -> None:
    claim = claimed(engine)
    assert finish(engine, claim, scale=0.94, flown_utc=FLOWN)
    flight = FlightStore(engine).get(OWNER, flight_id)
    done = flight.latest
    assert (done.state, done.progress, done.verdict) == (JobState.DONE, 1.0, "accepted")
    assert done.log_speed_scale == pytest.approx(-0.0618754, abs=1e-7)
    assert (done.log_speed_scale_uncertainty, done.method) == (0.004, "1")
    assert done.series_key == f"{flight_id}-1"
    assert done.finished_utc is not None
    assert done.finished_utc >= done.created_utc
    assert flight.flown_utc == FLOWN


def test_a_result_of_a_refused_flight_has_no_scale(engine: Engine, flight_id: str) -> None:
    nothing = {"log_speed_scale": None, "log_speed_scale_uncertainty": None, "series_key": None}
    assert finish(engine, claimed(engine), verdict="refused", **nothing)
    done = job(engine, flight_id)
    assert (done.verdict, done.log_speed_scale, done.series_key) == ("refused", None, None)


def test_the_end_may_be_told_twice(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    """The first answer can be lost on its way."""
    claim = claimed(engine)
    assert finish(engine, claim)
    assert finish(engine, claim)
    assert not queue.fail(claim, "whatever")
    assert job(engine, flight_id).state is JobState.DONE


def test_a_job_that_failed_says_why(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    claim = claimed(engine)
    assert queue.fail(claim, "this is no log")
    assert queue.fail(claim, "this is no log")
    failed = job(engine, flight_id)
    assert (failed.state, failed.failure) == (JobState.FAILED, "this is no log")
    assert failed.finished_utc is not None
    assert queue.claim("a worker", LEASE_S) is None
    assert not finish(engine, claim)


def test_heartbeats_keep_a_job(queue: JobQueue, engine: Engine, flight_id: str, clock: Clock) -> None:
    claim = claimed(engine, LEASE_S)
    for beat in range(1, 5):
        clock.now_s += 0.9 * LEASE_S
        assert queue.heartbeat(claim, beat / 4)
        assert queue.claim("another", LEASE_S) is None
        assert job(engine, flight_id).progress == beat / 4
    assert finish(engine, claim)


@pytest.mark.parametrize(("told", "kept"), [(-0.5, 0.0), (7.0, 1.0)])
def test_progress_is_between_0_and_1(queue: JobQueue, engine: Engine, flight_id: str, told: float, kept: float) -> None:
    assert queue.heartbeat(claimed(engine), told)
    assert job(engine, flight_id).progress == kept


# --- workers that die


def test_the_job_of_a_dead_worker_is_done_by_another(
    queue: JobQueue, engine: Engine, flight_id: str, clock: Clock
) -> None:
    dead = claimed(engine, LEASE_S)
    clock.now_s += LEASE_S - 1
    assert queue.claim("another", LEASE_S) is None
    clock.now_s += 2
    second = claimed(engine, LEASE_S)
    assert (second.flight_id, second.fence) == (flight_id, dead.fence + 1)
    assert job(engine, flight_id).attempts == 2
    # the first was not dead after all
    assert not finish(engine, dead, scale=2.0)
    assert [call(queue, dead) for call in CALLS.values()] == [False] * 4
    assert finish(engine, second, scale=0.94)
    assert not finish(engine, dead, scale=2.0)
    assert job(engine, flight_id).log_speed_scale == pytest.approx(-0.0618754, abs=1e-7)


def test_a_poison_log_fails_in_the_end(queue: JobQueue, engine: Engine, flight_id: str, clock: Clock) -> None:
    for attempt in range(1, 4):
        claimed(engine, LEASE_S)
        assert job(engine, flight_id).attempts == attempt
        clock.now_s += LEASE_S + 1
    assert queue.claim("a worker", LEASE_S) is None
    failed = job(engine, flight_id)
    assert failed.state is JobState.FAILED
    assert failed.failure is not None
    assert "begun 3 times" in failed.failure
    assert failed.finished_utc is not None


def test_a_reaper_hears_which_jobs_wait_again(queue: JobQueue, engine: Engine, clock: Clock) -> None:
    first, second = (add_flight(engine, log).flight_id for log in ("log 1", "log 2"))
    claimed(engine, LEASE_S)
    claimed(engine, 10 * LEASE_S)
    assert queue.release_expired() == ()
    clock.now_s += LEASE_S + 1
    assert queue.release_expired() == ((first, 1),)
    assert queue.release_expired() == ()
    assert [job(engine, flight).state for flight in (first, second)] == [JobState.QUEUED, JobState.RUNNING]


def test_an_attempt_that_came_to_nothing_is_tried_again(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    for _ in range(2):
        assert queue.try_again(claimed(engine), "it took more than 2 GiB") is JobState.QUEUED
        assert job(engine, flight_id).progress == 0
    claim = claimed(engine)
    assert queue.try_again(claim, "it took more than 2 GiB") is JobState.FAILED
    failed = job(engine, flight_id)
    assert failed.failure == "The reduction was begun 3 times and never came to its end: it took more than 2 GiB."
    assert queue.claim("a worker", LEASE_S) is None


def test_a_worker_that_stops_gives_its_job_back(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    for _ in range(5):
        claim = claimed(engine)
        assert queue.release(claim)
        # its last heartbeat was still on its way
        assert not queue.heartbeat(claim, 0.5)
        given = job(engine, flight_id)
        assert (given.state, given.attempts, given.progress) == (JobState.QUEUED, 0, 0.0)
    assert finish(engine, claimed(engine))


# --- clients that change their mind


def test_a_job_is_cancelled_while_it_waits(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    assert queue.cancel(OWNER, flight_id)
    assert queue.claim("a worker", LEASE_S) is None
    cancelled = job(engine, flight_id)
    assert (cancelled.state, cancelled.failure, cancelled.cancel_requested) == (JobState.CANCELLED, "cancelled", True)
    assert not queue.cancel(OWNER, flight_id)


def test_a_job_is_cancelled_while_it_runs(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    claim = claimed(engine)
    assert queue.cancel(OWNER, flight_id)
    assert [call(queue, claim) for call in CALLS.values()] == [False] * 4
    assert not finish(engine, claim)
    assert job(engine, flight_id).state is JobState.CANCELLED


def test_what_is_done_is_not_cancelled(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    assert finish(engine, claimed(engine))
    assert not queue.cancel(OWNER, flight_id)
    assert job(engine, flight_id).state is JobState.DONE


def test_a_flight_is_deleted_while_its_job_runs(queue: JobQueue, engine: Engine, flight_id: str) -> None:
    claim = claimed(engine)
    FlightStore(engine).delete(OWNER, flight_id)
    assert [call(queue, claim) for call in CALLS.values()] == [False] * 4
    assert not finish(engine, claim)
    with pytest.raises(NotKept):
        queue.cancel(OWNER, flight_id)


# --- clocks that jump


def test_a_clock_that_jumps_forward_costs_at_most_a_second_beginning(
    queue: JobQueue, engine: Engine, flight_id: str, clock: Clock
) -> None:
    first = claimed(engine, LEASE_S)
    clock.now_s += 86_400
    second = claimed(engine, LEASE_S)
    assert not queue.heartbeat(first, 0.5)
    assert finish(engine, second)
    assert not finish(engine, first)
    assert job(engine, flight_id).state is JobState.DONE


def test_a_worker_that_speaks_up_first_after_a_jump_has_its_job_back(
    queue: JobQueue, engine: Engine, flight_id: str, clock: Clock
) -> None:
    claim = claimed(engine, LEASE_S)
    clock.now_s += 86_400
    assert queue.release_expired() == ((flight_id, 1),)
    assert queue.heartbeat(claim, 0.5)
    assert queue.claim("another", LEASE_S) is None
    assert job(engine, flight_id).state is JobState.RUNNING
    assert finish(engine, claim)


def test_after_a_clock_that_jumps_back_a_dead_worker_s_job_waits_one_lease(
    queue: JobQueue, engine: Engine, flight_id: str, clock: Clock
) -> None:
    claimed(engine, LEASE_S)
    clock.now_s -= 86_400
    assert queue.claim("another", LEASE_S) is None
    clock.now_s += LEASE_S + 1
    assert claimed(engine).flight_id == flight_id


def test_after_a_clock_that_jumps_back_a_living_worker_goes_on(
    queue: JobQueue, engine: Engine, flight_id: str, clock: Clock
) -> None:
    claim = claimed(engine, LEASE_S)
    clock.now_s -= 86_400
    assert queue.claim("another", LEASE_S) is None
    clock.now_s += LEASE_S / 2
    assert queue.heartbeat(claim, 0.5)
    clock.now_s += LEASE_S / 2 + 1
    assert queue.claim("another", LEASE_S) is None
    assert finish(engine, claim)
    assert job(engine, flight_id).state is JobState.DONE


# --- many workers


def test_a_job_that_another_transaction_has_in_hand_is_passed_over(queue: JobQueue, engine: Engine) -> None:
    first, second = (add_flight(engine, log).flight_id for log in ("log 1", "log 2"))
    if engine.dialect.name == SQLITE:
        # there the other would have the whole database in hand
        assert claimed(engine).flight_id == first
        return
    with writing(engine) as connection:
        connection.execute(select(reductions).where(reductions.c.flight_id == first).with_for_update())
        assert claimed(engine).flight_id == second
        assert queue.claim("another", LEASE_S) is None
    assert claimed(engine).flight_id == first


def test_eight_threads_do_each_job_once(queue: JobQueue, engine: Engine) -> None:
    wanted = {add_flight(engine, f"log {number}").flight_id for number in range(24)}

    def work(_thread: int) -> list[str]:
        done = []
        while claim := queue.claim("a thread", LEASE_S):
            assert queue.heartbeat(claim, 0.5)
            assert finish(engine, claim)
            done.append(claim.flight_id)
        return done

    with ThreadPoolExecutor(8) as threads:
        done = list(chain.from_iterable(threads.map(work, range(8))))
    # an idle thread may go home while another's claim holds the last job's row
    assert Counter(done) == Counter(wanted)


def test_threads_that_finish_cancel_and_delete_do_not_wait_for_each_other(queue: JobQueue, engine: Engine) -> None:
    """Each takes its locks in the same order; else PostgreSQL would break a deadlock with an error."""
    store = FlightStore(engine)
    for number in range(8):
        # four duplicates of two logs: deleting one changes the others
        add_flight(engine, f"log {number % 2}")
    claims = [claimed(engine) for _ in range(8)]

    def end(turn: int) -> None:
        claim = claims[turn % 8]
        if turn < 8:
            finish(engine, claim)
        elif turn < 16:
            store.delete(OWNER, claim.flight_id)
        else:
            try:
                queue.cancel(OWNER, claim.flight_id)
                store.add_reduction(OWNER, claim.flight_id, {})
            except NotKept:
                pass

    with ThreadPoolExecutor(8) as threads:
        list(threads.map(end, [8 * step + place for place in range(8) for step in range(3)]))
    assert store.list(OWNER).items == ()
