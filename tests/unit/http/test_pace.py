"""A read that takes longer than the least rate allows is ended; others are left alone."""

import socket
from collections.abc import Iterator

import pytest

from service.http.pace import Pace


@pytest.fixture
def ends() -> Iterator[tuple[socket.socket, socket.socket]]:
    ours, theirs = socket.socketpair()
    with ours, theirs:
        yield ours, theirs


def test_a_silent_client_is_cut_off_and_can_still_be_answered(ends: tuple[socket.socket, socket.socket]) -> None:
    ours, theirs = ends
    with Pace(ours, least_rate=1e9, grace_s=0.0) as pace:
        with pace.read(1):
            assert ours.recv(1) == b""  # would wait for ever
        assert pace.too_slow
    ours.sendall(b"408")
    assert theirs.recv(3) == b"408"


def test_a_client_within_its_time_is_left_alone(ends: tuple[socket.socket, socket.socket]) -> None:
    ours, theirs = ends
    with Pace(ours, least_rate=1.0, grace_s=60.0) as pace:
        theirs.sendall(b"x")
        with pace.read(1):
            assert ours.recv(1) == b"x"
    assert not pace.too_slow


def test_without_a_socket_there_is_nothing_to_watch() -> None:
    with Pace(None, least_rate=1e9, grace_s=0.0) as pace, pace.read(1):
        pass
    assert not pace.too_slow
