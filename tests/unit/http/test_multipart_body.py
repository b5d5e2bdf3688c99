"""Multipart bodies in pieces, broken, hostile."""

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.domain.errors import InputTooLarge, LoiterwiseError, UnreadableInput, WrongValues
from service.http.multipart_body import MOST_PARTS, read_parts

BOUNDARY = "frontier"
LOG = bytes(range(256)) * 600 + b"\r\n--front\r\n--frontie\r\n"


class Pieces:
    """Gives what it holds in given pieces."""

    def __init__(self, *pieces: bytes) -> None:
        self._pieces = [piece for piece in pieces if piece]

    def read(self, size: int) -> bytes:
        if not self._pieces:
            return b""
        piece, self._pieces[0] = self._pieces[0][:size], self._pieces[0][size:]
        if not self._pieces[0]:
            del self._pieces[0]
        return piece


def part(name: str, data: bytes, extra: str = "") -> bytes:
    head = f'--{BOUNDARY}\r\nContent-Disposition: form-data; name="{name}"{extra}\r\n\r\n'
    return head.encode() + data + b"\r\n"


def body(*parts: bytes) -> bytes:
    return b"".join(parts) + f"--{BOUNDARY}--\r\n".encode()


def read(*pieces: bytes, boundary: str | None = BOUNDARY) -> dict[str, bytes]:
    got = {"log": bytearray(), "settings": bytearray()}
    met = read_parts(Pieces(*pieces), boundary, {name: kept.extend for name, kept in got.items()})
    return {name: bytes(got[name]) for name in met}


def test_parts_come_out_as_they_went_in() -> None:
    sent = body(part("log", LOG, '; filename="x.ulg"'), part("settings", b"{}"))
    assert read(sent) == {"log": LOG, "settings": b"{}"}
    assert read(*(sent[at : at + 1000] for at in range(0, len(sent), 1000))) == {"log": LOG, "settings": b"{}"}


@pytest.mark.parametrize("log", [b"", b"\r", b"\n", b"\r\n", b"\r\n--", b"abc\r\n--fron", b"--frontier"])
def test_it_does_not_matter_where_the_pieces_end(log: bytes) -> None:
    sent = body(part("log", log), part("settings", b"{}"))
    for at in range(len(sent)):
        assert read(sent[:at], sent[at:]) == {"log": log, "settings": b"{}"}, at
    assert read(*(sent[at : at + 1] for at in range(len(sent)))) == {"log": log, "settings": b"{}"}


def test_a_log_may_come_without_a_file_name_and_settings_with_one() -> None:
    sent = body(part("settings", b"{}", '; filename="s.json"'), part("log", LOG))
    assert read(sent) == {"log": LOG, "settings": b"{}"}


def test_what_stands_around_the_parts_is_ignored() -> None:
    sent = b"preamble\r\n" + body(part("log", LOG)) + b"epilogue\r\n--frontier\r\n"
    assert read(sent) == {"log": LOG}


def test_no_parts() -> None:
    assert read(body()) == {}


@pytest.mark.parametrize(("name", "pointer"), [("photo", "/photo"), ("", "/")])
def test_an_unknown_part(name: str, pointer: str) -> None:
    with pytest.raises(WrongValues) as caught:
        read(body(part(name, b"")))
    assert set(caught.value.errors) == {pointer}


def test_a_part_that_comes_twice() -> None:
    with pytest.raises(WrongValues) as caught:
        read(body(part("log", b"a"), part("log", b"b")))
    assert set(caught.value.errors) == {"/log"}


def headed(header: str) -> bytes:
    return f"--{BOUNDARY}\r\n{header}\r\n\r\ndata\r\n--{BOUNDARY}--".encode("latin-1")


@pytest.mark.parametrize(
    "sent",
    [
        b"",
        b"no boundary anywhere",
        body(part("log", LOG))[:-4],
        body(part("log", LOG))[:200],
        headed("Content-Type: text/csv"),
        headed("Content-Disposition"),
        headed("Content-Disposition: form-data"),
        b"--frontierland\r\n" + body(part("log", LOG)),
    ],
)
def test_broken_bodies(sent: bytes) -> None:
    with pytest.raises(UnreadableInput):
        read(sent)


def test_no_boundary() -> None:
    with pytest.raises(UnreadableInput):
        read(body(part("log", LOG)), boundary=None)


@pytest.mark.parametrize("sent", [part("n" * 100_000, b""), headed("X: y\r\n" * 10_000), b"--frontier" + b" " * 99_999])
def test_endless_headers(sent: bytes) -> None:
    with pytest.raises(InputTooLarge):
        read(sent)


def test_too_many_parts() -> None:
    names = [f"part{number}" for number in range(MOST_PARTS + 1)]
    sent = body(*(part(name, b"") for name in names))
    with pytest.raises(InputTooLarge):
        read_parts(io.BytesIO(sent), BOUNDARY, {name: bytearray().extend for name in names})


@given(st.binary(max_size=400), st.integers(0, 400), st.booleans())
def test_any_bytes_give_parts_or_a_clear_error(noise: bytes, at: int, inside: bool) -> None:
    sent = body(part("log", b"abc"), part("settings", b"{}"))
    at = min(at, len(sent))
    try:
        got = read(sent[:at] + noise + sent[at:] if inside else noise)
    except LoiterwiseError:
        return
    assert set(got) <= {"log", "settings"}
