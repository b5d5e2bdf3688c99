"""Pauses that grow from one try to the next."""

import random

GROWTH = 2.0


class Backoff:
    """From `first_s`, twice as long each time, up to `longest_s`; a quarter of it at random, so that many spread."""

    def __init__(self, first_s: float, longest_s: float) -> None:
        self._first_s = first_s
        self._longest_s = longest_s
        self.reset()

    def reset(self) -> None:
        """It went well."""
        self.fresh = True
        self._next_s = self._first_s

    def next_s(self) -> float:
        """Length of the pause to come."""
        self.fresh = False
        now_s, self._next_s = self._next_s, min(self._next_s * GROWTH, self._longest_s)
        return now_s * random.uniform(0.75, 1.0)
