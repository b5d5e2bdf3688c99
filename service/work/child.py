"""One attempt at one reduction, in a process of its own: do it within the limits, and say how it ended."""

import logging
import os
import time
from collections.abc import Callable
from dataclasses import asdict
from itertools import islice
from typing import Any

from schemas.wire import encode
from service.domain.errors import InputTooLarge, LoiterwiseError, UnreadableInput, WrongValues
from service.log_lines import ROOT
from service.storage.blobs import BlobDamaged, BlobMissing
from service.storage.errors import StorageUnavailable
from service.work.limits import lift_memory_limit, limit
from service.work.order import Order, Word
from service.work.reduce_kept import reduce_kept

Send = Callable[[bytes], object]
PROGRESS_EVERY_S = 0.1
MOST_POINTERS = 20
"""Faults of settings that a failure names."""
GONE = (BlobMissing, BlobDamaged)
"""Trying again finds the same."""

_log = logging.getLogger(ROOT)


def attempt(order: Order, send: Send) -> None:
    """Reduce, and send lines that say how far it is and how it ended. Whatever happens, nothing is raised."""
    say(send, Word.PID, os.getpid())
    try:
        limit(order.seconds, order.memory_bytes)
        word, told = _tried(order, _progress(send))
    except BaseException as error:
        word, told = Word.FAILED, _internal(order, error)
    say(send, word, told)


def say(send: Send, word: Word, told: Any) -> None:
    send(encode({word: told}) + b"\n")


def _tried(order: Order, progress: Callable[[float], None]) -> tuple[Word, Any]:
    try:
        return Word.DONE, asdict(reduce_kept(order, progress))
    except (UnreadableInput, WrongValues, InputTooLarge, *GONE) as error:
        return Word.WRONG, in_words(error)
    except (StorageUnavailable, OSError) as error:
        return _no_storage(order, error)
    except BaseException as error:
        if _is_want_of_memory(error):
            lift_memory_limit()
            return Word.NO_MEMORY, None
        raise


def _no_storage(order: Order, error: Exception) -> tuple[Word, Any]:
    if _is_want_of_memory(error):
        lift_memory_limit()
        return Word.NO_MEMORY, None
    cause = error.__cause__ or error
    fields = {"flight": order.flight_id, "reduction": order.number, "cause": str(cause)}
    _log.warning("log or series cannot be reached", extra={"fields": fields})
    # no paths or hosts: clients may come to read it
    return Word.NO_STORAGE, (isinstance(cause, OSError) and cause.strerror) or type(cause).__name__


def _internal(order: Order, error: BaseException) -> str:
    fields = {"flight": order.flight_id, "reduction": order.number}
    _log.error("unexpected failure", exc_info=error, extra={"fields": fields})
    return type(error).__name__


def _is_want_of_memory(error: BaseException | None) -> bool:
    """Libraries make errors of their own of it; the first cause tells."""
    while error is not None:
        if isinstance(error, MemoryError):
            return True
        error = error.__cause__ or error.__context__
    return False


def in_words(error: LoiterwiseError) -> str:
    """The problem's own text, with the places where the values are wrong."""
    found: dict[str, str] = getattr(error, "errors", {})
    named = [f"{pointer or '/'}: {text}" for pointer, text in islice(found.items(), MOST_POINTERS)]
    more = [f"and {len(found) - MOST_POINTERS} more"] if len(found) > MOST_POINTERS else []
    return " ".join([str(error), "; ".join([*named, *more])]).strip()


def _progress(send: Send) -> Callable[[float], None]:
    said_s = -PROGRESS_EVERY_S

    def told(share: float) -> None:
        nonlocal said_s
        now_s = time.monotonic()
        if now_s - said_s >= PROGRESS_EVERY_S:
            said_s = now_s
            say(send, Word.PROGRESS, share)

    return told
