"""Workers that are killed and stopped: no job is lost or done twice, and no process is left behind."""

import os
import random
import signal
import subprocess
import time
from dataclasses import replace
from pathlib import Path

import pytest

from service.domain.kept import JobState
from service.storage.blobs import KINDS
from service.storage.log_store import log_key
from service.work.children import Nursery
from service.work.supervise import bury_strangers
from service.work.sweep import sweep
from tests.storage.conftest import POSTGRESQL, SQLITE
from tests.work.processes import supervisor, wait_for_end, wait_for_family, wait_until_gone, worker
from tests.work.workshop import Workshop, descendants, lives, parent_of, wait_until, working


@pytest.fixture
def database() -> str:
    return SQLITE


def all_closed(workshop: Workshop, flights: list[str]) -> bool:
    return all(workshop.job(flight).state in (JobState.DONE, JobState.FAILED) for flight in flights)


@pytest.mark.parametrize("database", [POSTGRESQL])
def test_another_worker_takes_over_from_one_that_is_killed(workshop: Workshop, nursery: Nursery) -> None:
    go_on = workshop.folder / "go on"
    flight = workshop.add(("wait_for", str(go_on)))
    with worker(workshop.settings) as first:
        child = workshop.wait_for_mark()
        family = descendants(first.pid)
        assert child in family
        first.kill()
        wait_until_gone(family)
    go_on.touch()
    with working(workshop, nursery):
        wait_until(lambda: all_closed(workshop, [flight]))
    job = workshop.job(flight)
    assert (job.state, job.attempts) == (JobState.DONE, 2)
    assert [mark for _, mark in workshop.marked()] == ["begun", "begun", "ended"]


def test_killing_at_random_moments(workshop: Workshop) -> None:
    """Workers, nurseries and children of a supervisor, while it has eight jobs to do, on SQLite."""
    chance = random.Random(20260504)
    settings = replace(workshop.settings, job_attempts=20)
    flights = [workshop.add(("mark", str(number)), ("sleep", 0.1)) for number in range(8)]
    with supervisor(settings) as process:
        workshop.wait_for_mark()
        seen: set[int] = set()
        for _ in range(4):
            time.sleep(chance.uniform(0.0, 0.4))
            family = wait_for_family(process, 1)
            seen |= set(family)
            victim = chance.choice(family)
            if lives(victim):
                os.kill(victim, signal.SIGKILL)
        wait_until(lambda: all_closed(workshop, flights))
        seen |= set(descendants(process.pid))
        process.terminate()
        assert wait_for_end(process) == 0
    wait_until_gone(list(seen))
    assert [workshop.job(flight).state for flight in flights] == [JobState.DONE] * 8
    # what children left that were killed while they wrote is gone after a sweep, and nothing else is
    for path in [*Path(settings.store).rglob("*"), *Path(settings.spool).iterdir()]:
        os.utime(path, (0, 0))
    sweep(settings)
    kept = {blob.key for kind in KINDS for blob in workshop.blobs.list(kind)}
    logs = {log_key(workshop.flight(flight).log_sha256) for flight in flights}
    assert kept == logs | {workshop.job(flight).series_key for flight in flights}
    left = [*Path(settings.store).rglob("*"), *Path(settings.spool).iterdir()]
    assert len([path for path in left if path.is_file()]) == len(kept)


def test_sigterm_lets_the_job_end(workshop: Workshop) -> None:
    go_on = workshop.folder / "go on"
    first, second = workshop.add(("wait_for", str(go_on))), workshop.add()
    with worker(workshop.settings) as process:
        workshop.wait_for_mark()
        process.terminate()
        go_on.touch()
        assert wait_for_end(process) == 0
    assert (workshop.job(first).state, workshop.job(second).state) == (JobState.DONE, JobState.QUEUED)


def test_a_supervisor_starts_again_what_dies_and_nothing_outlives_it(workshop: Workshop) -> None:
    flight = workshop.add(("sleep", 600))
    with supervisor(replace(workshop.settings, workers=1, grace_s=0.2), "sleep", "600") as process:
        child = workshop.wait_for_mark()
        os.kill(parent_of(parent_of(child)), signal.SIGKILL)
        again = workshop.wait_for_mark("begun", 2)
        assert again != child
        # the worker, its nursery, the child, and what runs beside
        family = descendants(process.pid)
        assert len(family) == 4
        process.kill()
        wait_until_gone(family)
    # one attempt was lost with its worker; the other was given back, for that worker could still do so
    assert (workshop.job(flight).state, workshop.job(flight).attempts) == (JobState.QUEUED, 1)


def test_what_runs_beside_decides_about_the_end(workshop: Workshop) -> None:
    with supervisor(replace(workshop.settings, workers=0), "sh", "-c", "exit 7") as process:
        assert wait_for_end(process) == 7


def test_what_runs_beside_is_asked_to_stop(workshop: Workshop) -> None:
    said = workshop.folder / "said"
    script = f"trap 'echo stopping > {said}; exit 0' TERM; echo ready > {said}; while :; do sleep 0.05; done"
    with supervisor(replace(workshop.settings, workers=0), "sh", "-c", script) as process:
        wait_until(said.exists)
        process.terminate()
        assert wait_for_end(process) == 0
    assert said.read_text() == "stopping\n"


def test_a_supervisor_sweeps(workshop: Workshop) -> None:
    orphan = workshop.folder / "spool" / "loiterwise-upload-x"
    orphan.parent.mkdir()
    orphan.touch()
    os.utime(orphan, (0, 0))
    with supervisor(replace(workshop.settings, workers=0, sweep_every_s=0.1)) as process:
        wait_until(lambda: not orphan.exists())
        process.terminate()
        assert wait_for_end(process) == 0


def test_the_first_process_of_a_container_takes_note_of_ended_strangers(monkeypatch: pytest.MonkeyPatch) -> None:
    own, stranger = subprocess.Popen(["sleep", "600"]), subprocess.Popen(["true"])
    os.waitid(os.P_PID, stranger.pid, os.WEXITED | os.WNOWAIT)
    bury_strangers([own.pid, None])
    os.waitid(os.P_PID, stranger.pid, os.WEXITED | os.WNOWAIT)
    monkeypatch.setattr(os, "getpid", lambda: 1)
    bury_strangers([own.pid, None])
    with pytest.raises(ChildProcessError):
        os.waitpid(stranger.pid, os.WNOHANG)
    stranger.wait()
    own.kill()
    assert own.wait() == -signal.SIGKILL
