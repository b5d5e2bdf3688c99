"""At most so many reductions at once in one process: they share its memory and its processor."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager

from service.http.failures import TooBusy


class Gate:
    def __init__(self, places: int, wait_s: float) -> None:
        self._places = threading.BoundedSemaphore(places)
        self._wait_s = wait_s

    @contextmanager
    def turn(self) -> Iterator[None]:
        """Wait for a place and keep it for the context; `TooBusy` after too long a wait."""
        if not self._places.acquire(timeout=self._wait_s):
            raise TooBusy("Too many reductions are under way.", {"Retry-After": str(max(1, round(self._wait_s)))})
        try:
            yield
        finally:
            self._places.release()
