"""The queue: rows of `reductions` that are queued or running. The row is the truth, whoever carries word of it.

A worker claims a job for the time of a lease and extends it by heartbeats. A job whose lease ran out is queued again,
or fails when it has been begun too often. Each claim raises the job's fence, and only the holder of the newest fence
may write to it: so two may at worst work on a job, but never two finish it.

**Clocks.** Leases are measured on one clock, the database's. If it jumps forward, leases end early: an idle worker may
begin the job a second time, and the first is told so at its next heartbeat; if its heartbeat comes first, it has its
job back. If the clock jumps back, a lease would last too long: no lease may end later than its own length from now, so
the job of a dead worker waits one lease more, however far the clock went.
"""

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Engine, Select, and_, func, or_, select, text, update
from sqlalchemy.sql import ColumnElement

from service.domain.kept import Claim, JobState
from service.storage.audit import Action, note
from service.storage.clock import database_seconds, utc_now
from service.storage.engine import reading, writing
from service.storage.errors import NotKept
from service.storage.flights import locked_flight
from service.storage.tables import OPEN_STATES, flights, reductions

CANCELLED = "cancelled"
MAX_ATTEMPTS = 3
LATE_LEASE_S = 1.0
"""A lease that ends later than its length from now, by more than this, was given before the clock was set back."""


class JobQueue:
    def __init__(self, engine: Engine, max_attempts: int = MAX_ATTEMPTS) -> None:
        self._engine = engine
        self._max_attempts = max_attempts

    def claim(self, worker: str, lease_s: float, *, only: tuple[str, int] | None = None) -> Claim | None:
        """The oldest job that waits, now in the hands of `worker` (a name for the log); None: there is none.

        `only` asks for one job, by flight and number. Jobs whose lease ran out are queued again first.
        """
        if not self._anything_to_do():
            return None
        with writing(self._engine) as connection:
            now_s = database_seconds(connection)
            self._end_leases(connection, now_s)
            found = connection.execute(_next_job(only)).one_or_none()
            if found is None:
                return None
            connection.execute(
                _job(found.flight_id, found.number).values(
                    state=JobState.RUNNING,
                    worker=worker,
                    attempts=reductions.c.attempts + 1,
                    fence=found.fence + 1,
                    lease_s=lease_s,
                    lease_until_s=now_s + lease_s,
                    progress=0.0,
                )
            )
            return Claim(**{**found._mapping, "fence": found.fence + 1})

    def heartbeat(self, claim: Claim, progress: float) -> bool:
        """Extend the lease. False: stop; the job was cancelled or deleted, or another has it or has done it."""
        with writing(self._engine) as connection:
            changed = connection.execute(
                _held(claim).values(
                    state=JobState.RUNNING,
                    lease_until_s=database_seconds(connection) + reductions.c.lease_s,
                    progress=min(max(progress, 0.0), 1.0),
                )
            )
            return changed.rowcount == 1

    def finish(
        self,
        claim: Claim,
        *,
        summary: Mapping[str, Any],
        verdict: str,
        log_speed_scale: float | None,
        log_speed_scale_uncertainty: float | None,
        series_key: str | None,
        method: str | None,
        flown_utc: datetime | None = None,
    ) -> bool:
        """Write the result. False: the job is no longer the claim's, and nothing was written. Repeating it is harmless.

        `flown_utc` is the start of the log, where it is known.
        """
        result = {
            "state": JobState.DONE,
            "progress": 1.0,
            "summary": summary,
            "verdict": verdict,
            "log_speed_scale": log_speed_scale,
            "log_speed_scale_uncertainty": log_speed_scale_uncertainty,
            "series_key": series_key,
            "method": method,
        }
        with writing(self._engine) as connection:
            if not self._close(connection, claim, result):
                return False
            newest = or_(flights.c.done_number.is_(None), flights.c.done_number < claim.number)
            mine = update(flights).where(flights.c.flight_id == claim.flight_id)
            connection.execute(mine.where(newest).values(done_number=claim.number, verdict=verdict))
            if flown_utc is not None:
                connection.execute(mine.values(flown_utc=flown_utc))
            return True

    def fail(self, claim: Claim, reason: str) -> bool:
        """It failed for good: trying again would end the same. False as in `finish`."""
        with writing(self._engine) as connection:
            return self._close(connection, claim, {"state": JobState.FAILED, "failure": reason})

    def try_again(self, claim: Claim, reason: str) -> JobState | None:
        """This attempt came to nothing (the process died, or ran out of time or memory).

        Queued while attempts are left, else failed with `reason`; None: the job is no longer the claim's.
        """
        with writing(self._engine) as connection:
            again = _held(claim).where(reductions.c.attempts < self._max_attempts).values(**_queued_again())
            if connection.execute(again).rowcount:
                return JobState.QUEUED
            failed = {"state": JobState.FAILED, "failure": _exhausted(self._max_attempts, reason)}
            return JobState.FAILED if self._close(connection, claim, failed) else None

    def release(self, claim: Claim) -> bool:
        """Back into the queue, because the worker stops; the attempt does not count. False as in `finish`."""
        with writing(self._engine) as connection:
            back = _held(claim).values(**_queued_again(), attempts=reductions.c.attempts - 1)
            return connection.execute(back).rowcount == 1

    def release_expired(self) -> tuple[tuple[str, int], ...]:
        """Queue again what dead workers held, or let it fail; those queued again, as (flight, number)."""
        with writing(self._engine) as connection:
            return self._end_leases(connection, database_seconds(connection))

    def queued(self, limit: int = 1000) -> tuple[tuple[str, int], ...]:
        """The jobs that wait, the oldest first, as (flight, number)."""
        wanted = select(reductions.c.flight_id, reductions.c.number).where(text(OPEN_STATES), _is(JobState.QUEUED))
        with reading(self._engine) as connection:
            rows = connection.execute(_oldest_first(wanted).limit(limit))
            return tuple((row.flight_id, row.number) for row in rows)

    def cancel(self, owner: str, flight_id: str, *, by: str | None = None) -> bool:
        """Cancel what is queued or running of a flight; its worker hears of it at the next heartbeat.

        False: there was nothing to cancel. Raises NotKept.
        """
        with writing(self._engine) as connection:
            locked_flight(connection, owner, flight_id)
            cancelled = connection.execute(
                update(reductions)
                .where(reductions.c.flight_id == flight_id, text(OPEN_STATES))
                .values(
                    **_closed(),
                    state=JobState.CANCELLED,
                    failure=CANCELLED,
                    cancel_requested=True,
                )
            ).rowcount
            if cancelled:
                note(connection, owner, by, Action.REDUCTION_CANCELLED, flight_id)
            return bool(cancelled)

    def depth(self) -> int:
        """How many jobs wait, over all owners."""
        waiting = select(func.count()).select_from(reductions).where(text(OPEN_STATES), _is(JobState.QUEUED))
        with reading(self._engine) as connection:
            return connection.scalar(waiting) or 0

    def _anything_to_do(self) -> bool:
        """Asked without the lock of a writer: idle workers disturb nobody."""
        with reading(self._engine) as connection:
            due = or_(_is(JobState.QUEUED), _lease_is_over(database_seconds(connection)))
            some = select(reductions.c.number).where(text(OPEN_STATES), due).limit(1)
            return connection.execute(some).one_or_none() is not None

    def _close(self, connection: Connection, claim: Claim, values: Mapping[str, Any]) -> bool:
        """End the job with `values` if it is still the claim's, or was ended so by it before."""
        try:
            # the flight's row first, as everywhere: else two transactions may wait for each other
            locked_flight(connection, None, claim.flight_id)
        except NotKept:
            return False
        if connection.execute(_held(claim).values(**_closed(), **values)).rowcount:
            return True
        ended = select(reductions.c.number).where(_fenced(claim), reductions.c.state == values["state"])
        return connection.execute(ended).one_or_none() is not None

    def _end_leases(self, connection: Connection, now_s: float) -> tuple[tuple[str, int], ...]:
        # rows that another transaction has in hand are left to it
        wanted = (
            select(reductions.c.flight_id, reductions.c.number, reductions.c.attempts, reductions.c.lease_until_s)
            .where(text(OPEN_STATES), _lease_is_over(now_s))
            .with_for_update(skip_locked=True)
        )
        again = []
        for row in connection.execute(wanted).all():
            job = _job(row.flight_id, row.number)
            if row.lease_until_s > now_s:
                connection.execute(job.values(lease_until_s=now_s + reductions.c.lease_s))
            elif row.attempts < self._max_attempts:
                connection.execute(job.values(state=JobState.QUEUED, lease_until_s=None))
                again.append((row.flight_id, row.number))
            else:
                reason = _exhausted(row.attempts, "the process that worked on it was lost (memory, time, or a stop)")
                connection.execute(job.values(**_closed(), state=JobState.FAILED, failure=reason))
        return tuple(again)


def _next_job(only: tuple[str, int] | None) -> Select[Any]:
    wanted = (
        select(
            reductions.c.flight_id,
            reductions.c.number,
            reductions.c.fence,
            flights.c.log_sha256,
            flights.c.log_media_type,
            reductions.c.settings,
            reductions.c.profile.label("request_aircraft_profile"),
        )
        .select_from(reductions.join(flights))
        .where(text(OPEN_STATES), _is(JobState.QUEUED))
        .with_for_update(of=reductions, skip_locked=True)
    )
    if only is not None:
        wanted = wanted.where(reductions.c.flight_id == only[0], reductions.c.number == only[1])
    return _oldest_first(wanted).limit(1)


def _oldest_first(wanted: Select[Any]) -> Select[Any]:
    return wanted.order_by(reductions.c.created_utc, reductions.c.flight_id, reductions.c.number)


def _is(state: JobState) -> ColumnElement[bool]:
    return reductions.c.state == str(state)


def _lease_is_over(now_s: float) -> ColumnElement[bool]:
    late = reductions.c.lease_until_s > now_s + reductions.c.lease_s + LATE_LEASE_S
    return and_(_is(JobState.RUNNING), or_(reductions.c.lease_until_s < now_s, late))


def _job(flight_id: str, number: int) -> Any:
    return update(reductions).where(reductions.c.flight_id == flight_id, reductions.c.number == number)


def _fenced(claim: Claim) -> ColumnElement[bool]:
    return and_(
        reductions.c.flight_id == claim.flight_id,
        reductions.c.number == claim.number,
        reductions.c.fence == claim.fence,
    )


def _held(claim: Claim) -> Any:
    """The claim's job while it is open and nobody has claimed it since; also if its lease ran out."""
    return update(reductions).where(_fenced(claim), text(OPEN_STATES))


def _closed() -> dict[str, Any]:
    return {"finished_utc": utc_now(), "worker": None, "lease_until_s": None}


def _queued_again() -> dict[str, Any]:
    # a new fence: a heartbeat that comes late does not take it back
    return {
        "state": JobState.QUEUED,
        "worker": None,
        "lease_until_s": None,
        "progress": 0.0,
        "fence": reductions.c.fence + 1,
    }


def _exhausted(attempts: int, reason: str) -> str:
    times = "once" if attempts == 1 else f"{attempts} times"
    return f"The reduction was begun {times} and never came to its end: {reason}."
