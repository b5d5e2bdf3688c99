"""gzip as a stream: members, truncation, junk, bombs."""

import gzip
import io
import zlib

import pytest

from service.domain.errors import InputTooLarge, UnreadableInput
from service.http import gunzip
from service.http.gunzip import Gunzipped

DATA = bytes(range(256)) * 1000
MEBI = 1024 * 1024


class Dribble:
    """Gives a few bytes per read, as a network may."""

    def __init__(self, data: bytes, size: int) -> None:
        self._data, self._size = io.BytesIO(data), size

    def read(self, size: int) -> bytes:
        return self._data.read(min(size, self._size))


def decoded(body: bytes, *, limit: int = MEBI, piece: int = MEBI, ask: int = 1000) -> bytes:
    stream = Gunzipped(Dribble(body, piece), limit)
    return b"".join(iter(lambda: stream.read(ask), b""))


@pytest.mark.parametrize("piece", [1, 7, MEBI])
@pytest.mark.parametrize("ask", [1000, MEBI])
def test_whole(piece: int, ask: int) -> None:
    assert decoded(gzip.compress(DATA), piece=piece, ask=ask) == DATA


@pytest.mark.parametrize("piece", [1, 7, MEBI])
def test_several_members_are_one_body(piece: int) -> None:
    body = gzip.compress(DATA[:500]) + gzip.compress(b"") + gzip.compress(DATA[500:])
    assert decoded(body, piece=piece) == DATA


def test_an_empty_member_is_an_empty_body() -> None:
    assert decoded(gzip.compress(b"")) == b""


@pytest.mark.parametrize("kept", [0, 1, 5, 17, -9, -1])
def test_cut_short(kept: int) -> None:
    with pytest.raises(UnreadableInput, match="cut short"):
        decoded(gzip.compress(DATA)[:kept])


@pytest.mark.parametrize("piece", [1, MEBI])
@pytest.mark.parametrize("junk", [b"\0", b"\x1f", b"junk"])
def test_junk_behind_the_end(junk: bytes, piece: int) -> None:
    with pytest.raises(UnreadableInput, match="follow the end"):
        decoded(gzip.compress(DATA) + junk, piece=piece)


def test_no_gzip_at_all() -> None:
    with pytest.raises(UnreadableInput, match="not gzip"):
        decoded(b"time_s,impact_pressure_pa")


def test_a_flipped_bit_is_noticed() -> None:
    body = bytearray(gzip.compress(DATA))
    body[-6] ^= 1
    with pytest.raises(UnreadableInput):
        decoded(bytes(body))


def test_the_limit_counts_decoded_bytes_over_all_members() -> None:
    half = gzip.compress(b"x" * 600)
    assert len(decoded(half + half, limit=1200)) == 1200
    with pytest.raises(InputTooLarge):
        decoded(half + half, limit=1199)


def test_a_bomb_never_swells_beyond_what_is_asked_for() -> None:
    bomb = zlib.compressobj(9, zlib.DEFLATED, 31)
    body = bomb.compress(bytes(64 * MEBI)) + bomb.flush()
    stream = Gunzipped(io.BytesIO(body), 2 * MEBI)
    assert [len(stream.read(MEBI)) for _ in range(2)] == [MEBI, MEBI]
    with pytest.raises(InputTooLarge):
        stream.read(MEBI)


def test_endless_empty_members(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(gunzip, "MOST_GZIP_MEMBERS", 10)
    assert decoded(gzip.compress(b"") * 10) == b""
    with pytest.raises(UnreadableInput, match="members"):
        decoded(gzip.compress(b"") * 11)
