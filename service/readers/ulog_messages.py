"""A quick way through the messages of a ULog, up to the first that needs thought.

pyulog asks a dozen questions of each message. Nearly all are sound data messages, most of them of topics that nobody
needs: for these one look at the head is enough. What is not sound is left to pyulog, which then goes on from there.
"""

import struct
from collections.abc import Callable
from typing import BinaryIO, NamedTuple

from pyulog import ULog

BLOCK_BYTES = 1 << 20
DATA: int = ULog.MSG_TYPE_DATA
OTHER_KINDS = frozenset(
    {
        ULog.MSG_TYPE_ADD_LOGGED_MSG,
        ULog.MSG_TYPE_REMOVE_LOGGED_MSG,
        ULog.MSG_TYPE_INFO,
        ULog.MSG_TYPE_INFO_MULTIPLE,
        ULog.MSG_TYPE_PARAMETER,
        ULog.MSG_TYPE_PARAMETER_DEFAULT,
        ULog.MSG_TYPE_LOGGING,
        ULog.MSG_TYPE_LOGGING_TAGGED,
        ULog.MSG_TYPE_DROPOUT,
        ULog.MSG_TYPE_SYNC,
    }
)
"""Known kinds beside data."""

_unpack_head_and_number = struct.Struct("<HBH").unpack_from


class Taker(NamedTuple):
    """Where the data of a needed topic go, and the least and greatest length of its messages."""

    buffer: bytearray
    least: int
    most: int


Other = Callable[[int, bytes], tuple[int, Taker] | None]
"""Kind and payload of a message that is not data -> number and taker, if it announces a needed topic."""


def go_through(file: BinaryIO, takers: dict[int, Taker], take_other: Other, read_until: int) -> None:
    """Go through sound messages.

    Parameters
    ----------
    file : at the head of a message; left at the head of the first one that is cut, of an unknown kind, or beyond
        `read_until`, or at the end.
    takers : message number -> taker; grows with what `take_other` gives.
    read_until : offset in the file.
    """
    block, block_at = b"", file.tell()
    while True:
        done, finished = _go_through_block(block, takers, take_other, read_until - block_at)
        block_at += done
        more = b"" if finished else file.read(BLOCK_BYTES)
        if not more:
            break
        block = block[done:] + more
    file.seek(block_at)


def _go_through_block(block: bytes, takers: dict[int, Taker], take_other: Other, until: int) -> tuple[int, bool]:
    """Offset of the first message that was not taken, and whether more of the file would not help."""
    at, last_head, end = 0, len(block) - 5, len(block)
    while at <= last_head:
        size, kind, number = _unpack_head_and_number(block, at)
        stop = at + 3 + size
        if stop > end:
            return at, False
        if stop > until:
            return at, True
        if kind == DATA and size >= 2:
            taker = takers.get(number)
            if taker is not None and taker.least <= size - 2 <= taker.most:
                taker.buffer.extend(block[at + 5 : at + 5 + taker.least])
        elif kind in OTHER_KINDS:
            announced = take_other(kind, block[at + 3 : stop])
            if announced is not None:
                takers[announced[0]] = announced[1]
        else:
            return at, True
        at = stop
    return at, False
