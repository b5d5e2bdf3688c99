"""Cuts off uploads that trickle.

The server's read returns only when all the bytes asked for are there, so a client that sends a byte now and then would
hold a thread for hours, and no check between two reads would ever run. A watcher shuts the socket for reading at the
deadline of the read under way, which ends that read; the answer can still be sent.
"""

import contextlib
import math
import socket
import threading
import time
from collections.abc import Iterator
from types import TracebackType
from typing import Self

LOOK_EVERY_S = 0.25


class Pace:
    """Deadlines for the reads of one upload: `grace_s` plus the bytes asked for over `least_rate` (bytes per second).

    Without a socket (another server, a test client) it does nothing.
    """

    def __init__(self, connection: socket.socket | None, least_rate: float, grace_s: float) -> None:
        self._connection = connection
        self._least_rate, self._grace_s = least_rate, grace_s
        self._deadline = math.inf
        self._stop = threading.Event()
        self._watcher: threading.Thread | None = None
        self.too_slow = False

    @contextlib.contextmanager
    def read(self, size: int) -> Iterator[None]:
        """A read of `size` bytes is under way; what happens between reads is not the client's time."""
        self._deadline = time.monotonic() + self._grace_s + size / self._least_rate
        if self._connection is not None and self._watcher is None:
            self._watcher = threading.Thread(target=self._watch, name="upload-pace", daemon=True)
            self._watcher.start()
        try:
            yield
        finally:
            self._deadline = math.inf

    def _watch(self) -> None:
        while not self._stop.wait(LOOK_EVERY_S):
            if time.monotonic() >= self._deadline:
                self.too_slow = True
                self._shut()
                return

    def _shut(self) -> None:
        if self._connection is not None:
            with contextlib.suppress(OSError):
                self._connection.shutdown(socket.SHUT_RD)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        self._stop.set()
        if self._watcher is not None:
            self._watcher.join()
