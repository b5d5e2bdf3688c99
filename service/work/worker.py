"""A worker: claim a job, have a child do it, write what came of it; and again, until told to stop.

It outlives a database that goes away: it waits, and what a child finished meanwhile is written when it is back.
"""

import logging
import os
import socket
import time
from collections.abc import Callable
from typing import Any

from service.domain.kept import Claim
from service.log_lines import ROOT, log_to_stderr
from service.storage.engine import open_engine
from service.storage.errors import StorageUnavailable
from service.storage.jobs import JobQueue
from service.work.backoff import Backoff
from service.work.children import Nursery
from service.work.lease import Lease
from service.work.order import order_of
from service.work.run_job import Cause, Done, Lost, NotNow, Outcome, Spent, Stopped, Wrong, run_job
from service.work.settings import WorkSettings
from service.work.stop import Stop

IDLE_S = (0.05, 0.5)
"""Between looks into an empty queue, at first and at most: clients may wait for the answer."""
AWAY_S = (0.2, 5.0)
"""Between tries while the storage is away or the machine has no room."""
NOT_NOW_PATIENCE_S = 600.0
"""How long a worker holds a job that cannot be done now before the attempt counts. Own choice."""
RESULT_PATIENCE_S = 1800.0
"""How long a finished result waits for the database; well below the age at which a sweep takes its series."""
BUG_PAUSE_S = 1.0
"""After a failure of the worker itself, before it claims the next job."""

_log = logging.getLogger(ROOT)


class Worker:
    """Does the jobs of `queue`, one at a time.

    Parameters
    ----------
    name : for the log and the rows.
    """

    def __init__(self, name: str, queue: JobQueue, nursery: Nursery, settings: WorkSettings, stop: Stop) -> None:
        self._name = name
        self._queue = queue
        self._nursery = nursery
        self._settings = settings
        self._stop = stop

    def run(self) -> None:
        """Until told to stop."""
        idle, away = Backoff(*IDLE_S), Backoff(*AWAY_S)
        while not self._stop.is_set():
            try:
                claim = self._queue.claim(self._name, self._settings.lease_s)
            except StorageUnavailable as error:
                self._tell_once(away, error)
                self._stop.wait(away.next_s())
                continue
            away.reset()
            if claim is None:
                self._stop.wait(idle.next_s())
                continue
            idle.reset()
            self.do(claim)

    def do(self, claim: Claim) -> Outcome:
        """Carry out one claim and write what came of it."""
        begun_s = time.monotonic()
        lease = Lease(self._queue, claim, self._settings.lease_s)
        try:
            outcome = self._outcome(lease)
            written = self._write(claim, outcome)
        except Exception as error:
            # a bug of ours must not take the worker along (it would take the next one, too), nor burn up the queue
            _log.error("unexpected failure", exc_info=error, extra={"fields": _of(claim)})
            outcome = Spent(Cause.CRASH, f"the worker failed ({type(error).__name__})")
            written = self._write(claim, outcome)
            self._stop.wait(BUG_PAUSE_S)
        told = {"outcome": type(outcome).__name__.lower(), "written": written}
        took = {"seconds": round(time.monotonic() - begun_s, 3)}
        _log.info("job", extra={"fields": _of(claim) | told | took | _why(outcome)})
        return outcome

    def _outcome(self, lease: Lease) -> Outcome:
        """Of the last of as many children as it takes while the store, or room on the machine, comes and goes."""
        away, give_up_s = Backoff(*AWAY_S), time.monotonic() + NOT_NOW_PATIENCE_S
        while True:
            outcome = run_job(self._nursery, order_of(lease.claim, self._settings), lease, self._settings, self._stop)
            if not isinstance(outcome, NotNow) or time.monotonic() > give_up_s:
                return outcome
            if (instead := self._hold(lease, away.next_s())) is not None:
                return instead

    def _hold(self, lease: Lease, seconds: float) -> Outcome | None:
        """Keep the job for a while without working on it; an outcome if that is its end."""
        until_s = time.monotonic() + seconds
        while (left_s := until_s - time.monotonic()) > 0:
            if not lease.keep(0.0):
                return Lost()
            if self._stop.wait(min(left_s, max(lease.next_beat_s - time.monotonic(), 0.0))):
                return Stopped()
        return None

    def _write(self, claim: Claim, outcome: Outcome) -> bool:
        """Tell the queue; while the database is away, try again. Whether the job was still ours to write."""
        write = self._writing(claim, outcome)
        away, give_up_s = Backoff(*AWAY_S), time.monotonic() + RESULT_PATIENCE_S
        while True:
            try:
                return bool(write())
            except StorageUnavailable as error:
                self._tell_once(away, error)
                if self._stop.over(self._settings.grace_s) or time.monotonic() > give_up_s:
                    # the lease runs out, and another does it again
                    return False
                self._pause(away.next_s())

    def _writing(self, claim: Claim, outcome: Outcome) -> Callable[[], object]:
        queue = self._queue
        match outcome:
            case Done(answer):
                return lambda: queue.finish(
                    claim,
                    summary=answer.summary,
                    verdict=answer.verdict,
                    log_speed_scale=answer.log_speed_scale,
                    log_speed_scale_uncertainty=answer.log_speed_scale_uncertainty,
                    series_key=answer.series_key,
                    method=answer.method,
                    flown_utc=answer.flown_utc,
                )
            case Wrong(reason):
                return lambda: queue.fail(claim, reason)
            case Spent(reason=reason) | NotNow(reason):
                return lambda: queue.try_again(claim, reason)
            case Stopped():
                return lambda: queue.release(claim)
            case Lost():
                return lambda: None

    def _pause(self, seconds: float) -> None:
        left_s = self._stop.grace_left_s(self._settings.grace_s)
        self._stop.wait(seconds if left_s is None else min(seconds, left_s))

    def _tell_once(self, away: Backoff, error: StorageUnavailable) -> None:
        if away.fresh:
            fields = {"worker": self._name, "cause": str(error.__cause__ or error)}
            _log.warning("the database is away; waiting", extra={"fields": fields})


def work(settings: WorkSettings, stop: Stop) -> None:
    """A worker of its own process. Call it in the main thread."""
    log_to_stderr(settings.log_level)
    engine = open_engine(settings.database)
    name = f"{socket.gethostname()}:{os.getpid()}"
    with Nursery(settings) as nursery:
        # it loads while the first job is claimed
        nursery.start()
        Worker(name, JobQueue(engine, settings.job_attempts), nursery, settings, stop).run()
    engine.dispose()


def _of(claim: Claim) -> dict[str, Any]:
    return {"flight": claim.flight_id, "reduction": claim.number}


def _why(outcome: Outcome) -> dict[str, Any]:
    return {"reason": outcome.reason} if isinstance(outcome, Wrong | Spent | NotNow) else {}
