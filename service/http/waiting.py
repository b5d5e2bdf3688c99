"""At most so many requests of one process wait for a result: each holds a thread, and others want answers too."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager


class WaitingPlaces:
    def __init__(self, places: int, longest_s: float) -> None:
        self._places = threading.BoundedSemaphore(places)
        self._longest_s = longest_s

    @contextmanager
    def place(self) -> Iterator[float]:
        """How long this request may wait [s]: not at all when every place is taken."""
        if not self._places.acquire(blocking=False):
            yield 0.0
            return
        try:
            yield self._longest_s
        finally:
            self._places.release()
