"""The work of a worker within the test's own process: as `service/work` does it, without processes and their limits."""

import dataclasses
import tempfile

from service.domain.errors import LoiterwiseError
from service.keeping import Stores
from service.work.order import order_of
from service.work.reduce_kept import reduce_kept
from service.work.settings import WorkSettings

LEASE_S = 60.0


def run_waiting_jobs(kept: Stores, store: str) -> int:
    """Claim and do every job that waits; how many."""
    done = 0
    with tempfile.TemporaryDirectory() as spool:
        settings = WorkSettings(database="", store=store, spool=spool)
        while (claim := kept.jobs.claim("test", LEASE_S)) is not None:
            try:
                answer = reduce_kept(order_of(claim, settings), lambda _share: None)
            except LoiterwiseError as error:
                kept.jobs.fail(claim, str(error))
            else:
                named = {field.name: getattr(answer, field.name) for field in dataclasses.fields(answer)}
                kept.jobs.finish(claim, **named)
            done += 1
    return done
