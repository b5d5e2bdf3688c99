"""A claim and its lease: kept by heartbeats, over when the database has not heard of us for too long."""

import time

from service.domain.kept import Claim
from service.storage.errors import StorageUnavailable
from service.storage.jobs import JobQueue

BEATS = 3
"""Heartbeats in one lease: two may be lost."""


class Lease:
    def __init__(self, queue: JobQueue, claim: Claim, lease_s: float) -> None:
        self._queue = queue
        self._lease_s = lease_s
        self.claim = claim
        # a little late, for the claim is made already; its fence guards against what may follow from that
        self._heard_s = time.monotonic()
        self.next_beat_s = self._heard_s + lease_s / BEATS

    def keep(self, progress: float) -> bool:
        """Extend the lease if it is time to. False: the job is not ours any more, or may be another's already."""
        now_s = time.monotonic()
        if now_s < self.next_beat_s:
            return True
        self.next_beat_s = now_s + self._lease_s / BEATS
        try:
            if not self._queue.heartbeat(self.claim, progress):
                return False
            self._heard_s = now_s
        except StorageUnavailable:
            # the database may be back before the lease is over
            pass
        return time.monotonic() < self._heard_s + self._lease_s
