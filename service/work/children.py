"""The worker's side of the nursery: begin a child, hear what it says, end it."""

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import suppress
from multiprocessing.connection import wait
from types import TracebackType
from typing import Any, Self

from service.work.order import Order, Word
from service.work.settings import WorkSettings

READ_BYTES = 65536
END_WITHIN_S = 10.0
"""A killed process that is not gone by then hangs in the system itself; its nursery is given up."""
OWN_PREFIX = "LOITERWISE_"
ONE_THREAD = {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "MKL_NUM_THREADS": "1"}
"""Matrices are small, and the workers fill the processor."""
FEW_ARENAS = {"MALLOC_ARENA_MAX": "2"}
"""Threads of an object store's client would reserve address space for memory of their own, and the limit counts it."""
SEND_WITHIN_S = 30.0


class Nursery:
    """A process from which children begin, started when it is first needed, and again when it is lost.

    Start it from a thread that stays (the main one): the kernel ends the nursery when that thread ends.
    """

    def __init__(self, settings: WorkSettings) -> None:
        self._settings = settings
        self._process: subprocess.Popen[bytes] | None = None
        self._channel: socket.socket | None = None

    def start(self) -> None:
        """Start it if it does not run; it loads while others go on."""
        if self._process is not None and self._process.poll() is None:
            return
        self.close()
        self._channel, theirs = socket.socketpair()
        command = [sys.executable, "-m", "service.work.nursery"]
        with theirs:
            self._process = subprocess.Popen(
                [*command, str(os.getpid()), self._settings.log_level, self._settings.reducer],
                stdin=theirs.fileno(),
                stdout=subprocess.DEVNULL,
                env=_environment(),
            )

    def begin(self, order: Order) -> "Child":
        """A child that carries out `order`; the one before must have ended."""
        self.start()
        assert self._channel is not None
        # if it is lost at this very moment, the child will be found to have ended without a word
        with suppress(OSError):
            # settings may be long, and a nursery that hangs does not read
            self._channel.settimeout(SEND_WITHIN_S)
            self._channel.sendall(order.to_line())
        self._channel.setblocking(False)
        return Child(self._channel, self)

    def close(self) -> None:
        """End it, and the child with it."""
        if self._channel is not None:
            self._channel.close()
            self._channel = None
        if self._process is not None:
            self._process.kill()
            self._process.wait()
            self._process = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


class Child:
    """One attempt, as its words tell of it."""

    def __init__(self, channel: socket.socket, nursery: Nursery) -> None:
        self._channel = channel
        self._nursery = nursery
        self._unread = b""
        self.pid: int | None = None
        self.begun_s: float | None = None
        """When its first word came, on the monotonic clock; None before."""
        self.progress = 0.0
        self.answer: tuple[Word, Any] | None = None
        """How it ended by its own words; None if it has not said."""
        self.status: int | None = None
        """Its wait status once it is gone; None before, and if its nursery was lost."""
        self.ended = False

    def fileno(self) -> int:
        """To wait for its words."""
        return self._channel.fileno()

    def hear(self) -> None:
        """Take in what can be read without waiting."""
        for said in self._words():
            for word, told in said.items():
                self._take_in(word, told)

    def kill(self) -> None:
        """End it, and wait until it is gone: nothing of it may write after this."""
        give_up_s = time.monotonic() + END_WITHIN_S
        if self.pid is not None and not self.ended:
            # nobody has taken note of its end yet, or only just: the number is not another's already
            with suppress(ProcessLookupError):
                os.kill(self.pid, signal.SIGKILL)
            while not self.ended and time.monotonic() < give_up_s:
                wait([self.fileno()], give_up_s - time.monotonic())
                self.hear()
        if not self.ended:
            self._lost()

    def _words(self) -> Iterator[Mapping[str, Any]]:
        while (read := self._read()) is not None:
            if not read:
                self._lost()
                return
            *lines, self._unread = (self._unread + read).split(b"\n")
            for line in lines:
                # half a line of a child that was killed while it spoke
                with suppress(ValueError):
                    if isinstance(said := json.loads(line), dict):
                        yield said

    def _read(self) -> bytes | None:
        """What there is; empty at the end, None when there is nothing yet."""
        if self.ended:
            return None
        try:
            return self._channel.recv(READ_BYTES)
        except BlockingIOError:
            return None
        except OSError:
            return b""

    def _take_in(self, word: str, told: Any) -> None:
        match word:
            case Word.PID:
                self.pid, self.begun_s = told, time.monotonic()
            case Word.PROGRESS:
                self.progress = told
            case Word.ENDED:
                self.status, self.ended = told, True
            case _:
                self.answer = Word(word), told

    def _lost(self) -> None:
        """The nursery is gone, and the child with it."""
        self.ended = True
        self._nursery.close()


def _environment() -> dict[str, str]:
    """Without our own settings: all it needs comes with the orders, and the database is none of its business."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith(OWN_PREFIX)}
    return kept | ONE_THREAD | FEW_ARENAS
