"""The wish to stop: from a signal, from another thread, or because whoever started this process is gone."""

import os
import signal
import threading
import time
from collections.abc import Sequence
from multiprocessing.connection import wait


class Stop:
    """Once set it stays set. Waiting ends at once when it is set.

    Parameters
    ----------
    parent : a descriptor whose other end lives as long as the process that started this one; its end is a wish to stop.
    """

    def __init__(self, parent: int | None = None) -> None:
        self._parent = parent
        self._since_s: float | None = None
        self._hear, self._tell = os.pipe()

    def set(self, *_signal: object) -> None:
        """Also fit to be a signal's handler."""
        if self._since_s is None:
            self._since_s = time.monotonic()
            os.write(self._tell, b"!")

    def is_set(self) -> bool:
        return self._since_s is not None

    def over(self, grace_s: float) -> bool:
        """Is it set, and longer than `grace_s` ago?"""
        return self._since_s is not None and time.monotonic() - self._since_s >= grace_s

    def grace_left_s(self, grace_s: float) -> float | None:
        """How much of `grace_s` is left; None while it is not set."""
        return None if self._since_s is None else max(0.0, self._since_s + grace_s - time.monotonic())

    def wait(self, longest_s: float | None, others: Sequence[int] = ()) -> bool:
        """Wait until one of `others` (descriptors) can be read, the wish comes, or the time is over; is it set?

        Once it is set, only `others` end the waiting early.
        """
        ours = [] if self.is_set() else [self._hear, *([] if self._parent is None else [self._parent])]
        if not ours and not others:
            time.sleep(longest_s or 0.0)
            return True
        ready = wait([*others, *ours], longest_s)
        if self._parent in ready and not self.is_set() and not os.read(self._parent, 4096):
            self.set()
        return self.is_set()

    def on_signals(self) -> None:
        """Hear SIGTERM and SIGINT (a terminal sends the latter to the whole group). In the main thread only."""
        assert threading.current_thread() is threading.main_thread()
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, self.set)

    def close(self) -> None:
        os.close(self._hear)
        os.close(self._tell)
