"""`multipart/form-data` with the parts `log` and `settings`, streamed: the log goes straight to its file.

Own scanning of RFC 7578 (delimiters of RFC 2046): the framework's decoder adds a byte to a part when a piece of the
body ends amid the last delimiter, and its form parser writes each file twice.
"""

from collections.abc import Callable, Iterator, Mapping

from werkzeug.http import parse_options_header

from service.domain.errors import InputTooLarge, UnreadableInput, WrongValues
from service.http.gunzip import CHUNK_BYTES, ByteSource

MOST_PARTS = 8
LONGEST_HEADERS = 16 * 1024
"""Bytes of all header lines of one part."""

_BREAK = b"\r\n"

Write = Callable[[bytes], None]


def read_parts(source: ByteSource, boundary: str | None, writers: Mapping[str, Write]) -> set[str]:
    """Hand the bytes of each part to the writer of its name.

    Returns the names met. Raises `UnreadableInput` for a broken or cut body, `WrongValues` for a part that no writer
    takes or that comes twice, `InputTooLarge` for too many parts or too long headers.
    """
    if not boundary:
        raise UnreadableInput("The multipart body has no boundary in its Content-Type.")
    scanner = _Scanner(source)
    delimiter = _BREAK + b"--" + boundary.encode("utf-8", "replace")
    met: set[str] = set()
    for _ in scanner.until(delimiter):
        pass  # what stands before the first part is for no one
    while scanner.begins_part():
        if len(met) >= MOST_PARTS:
            raise InputTooLarge(f"The multipart body has more than {MOST_PARTS} parts.")
        write = _writer_of(_name_in(scanner.header_lines()), writers, met)
        for piece in scanner.until(delimiter):
            write(piece)
    scanner.drain()
    return met


def _writer_of(name: str, writers: Mapping[str, Write], met: set[str]) -> Write:
    if name not in writers:
        known = ", ".join(f"`{part}`" for part in writers)
        raise WrongValues(f"The parts are {known}.", {f"/{name[:64]}": "is no part that is read here"})
    if name in met:
        raise WrongValues("A part comes twice.", {f"/{name}": "is given twice"})
    met.add(name)
    return writers[name]


def _name_in(lines: list[bytes]) -> str:
    for line in lines:
        header, _, value = line.decode("utf-8", "replace").partition(":")
        if header.strip().lower() == "content-disposition":
            name = parse_options_header(value.strip())[1].get("name")
            if name is not None:
                return name
    raise UnreadableInput("A part of the multipart body has no name.")


class _Scanner:
    """Finds delimiters and lines in a stream, keeping no more of it than one read and one delimiter."""

    def __init__(self, source: ByteSource) -> None:
        self._source = source
        # so that a delimiter at the very start has its line break, too
        self._buffer = bytearray(_BREAK)

    def until(self, delimiter: bytes) -> Iterator[bytes]:
        """The bytes up to `delimiter`, which is consumed."""
        while (at := self._buffer.find(delimiter)) < 0:
            certain = len(self._buffer) - len(delimiter) + 1
            if certain > 0:
                yield self._take(certain)
            self._more()
        yield self._take(at)
        del self._buffer[: len(delimiter)]

    def begins_part(self) -> bool:
        """Whether a part follows the delimiter just consumed; False behind the last one."""
        while len(self._buffer) < 2:
            self._more()
        if self._buffer.startswith(b"--"):
            return False
        if self._line(LONGEST_HEADERS).strip(b" \t"):
            raise UnreadableInput("A line of the multipart body begins with its boundary, but goes on.")
        return True

    def header_lines(self) -> list[bytes]:
        """The header lines of a part, to the empty line."""
        lines, left = [], LONGEST_HEADERS
        while line := self._line(left):
            lines.append(line)
            left -= len(line)
        return lines

    def drain(self) -> None:
        """Read to the end, so that a body cut short behind the last part is noticed."""
        while self._source.read(CHUNK_BYTES):
            pass

    def _line(self, longest: int) -> bytes:
        while (at := self._buffer.find(_BREAK)) < 0 and len(self._buffer) <= longest:
            self._more()
        if at < 0 or at > longest:
            raise InputTooLarge(f"The headers of a part have more than {LONGEST_HEADERS} bytes.")
        line = self._take(at)
        del self._buffer[: len(_BREAK)]
        return line

    def _take(self, size: int) -> bytes:
        taken = bytes(self._buffer[:size])
        del self._buffer[:size]
        return taken

    def _more(self) -> None:
        chunk = self._source.read(CHUNK_BYTES)
        if not chunk:
            raise UnreadableInput("The multipart body is broken or cut short.")
        self._buffer += chunk
