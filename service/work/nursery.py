"""The process from which children begin: it has loaded what they need, so that each begins at once and afresh.

Run as a program by `service.work.children`, with a socket to the worker as standard input. It knows neither the
database nor its password. One child at a time; it ends with the worker, and the child with it.
"""

import gc
import os
import signal
import socket
import sys
import threading

from service.log_lines import log_to_stderr
from service.work.child import attempt, say
from service.work.limits import end_with_parent
from service.work.order import Order, Word
from service.work.reduce_kept import reducer_named

CHANNEL = 0
"""Descriptor of the socket."""


def main(parent: int, log_level: str, reducer: str) -> None:
    """Begin a child for every order that comes, until the worker is gone."""
    end_with_parent(parent)
    for number in (signal.SIGTERM, signal.SIGINT):
        # they go to whole groups of processes; what is to be stopped, and when, is the worker's to say
        signal.signal(number, signal.SIG_IGN)
    log_to_stderr(log_level)
    reducer_named(reducer)
    assert threading.active_count() == 1, "a process with threads must not fork"
    # collecting would touch, and so copy, every page that children share
    gc.freeze()
    with socket.socket(fileno=CHANNEL) as channel, channel.makefile("rb") as orders:
        for line in orders:
            status = _one_child(Order.from_line(line), channel)
            # a child that was killed may have left half a line
            channel.sendall(b"\n")
            say(channel.sendall, Word.ENDED, status)


def _one_child(order: Order, channel: socket.socket) -> int:
    """Wait status of the child once it is gone."""
    ours = os.getpid()
    pid = os.fork()
    if pid == 0:
        code = 1
        try:
            end_with_parent(ours)
            attempt(order, channel.sendall)
            code = 0
        finally:
            # nothing of the nursery's is to be tidied up by a child
            os._exit(code)
    return os.waitpid(pid, 0)[1]


if __name__ == "__main__":
    main(int(sys.argv[1]), sys.argv[2], sys.argv[3])
