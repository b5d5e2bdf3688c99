"""Damage that knows nothing of the format: what a bad medium, a cut transfer or a spiteful client does."""

from collections.abc import Callable, Mapping

import numpy as np

Random = np.random.Generator
Damage = Callable[[bytes, Random], bytes]

LARGEST = 2_000_000
"""Bytes that a damaged body may grow to."""


def place(data: bytes, random: Random) -> int:
    """Somewhere within, the end included."""
    return int(random.integers(0, len(data) + 1))


def span(data: bytes, random: Random, longest: int = 4096) -> slice:
    """A piece of up to `longest` bytes."""
    start = place(data, random)
    return slice(start, min(len(data), start + int(random.integers(1, longest))))


def flip_bits(data: bytes, random: Random) -> bytes:
    changed = np.frombuffer(data, np.uint8).copy()
    if changed.size:
        places = random.integers(0, changed.size, int(random.choice([1, 3, 20, 300])))
        changed[places] ^= (1 << random.integers(0, 8, places.size)).astype(np.uint8)
    return changed.tobytes()


def scribble(data: bytes, random: Random) -> bytes:
    changed = bytearray(data)
    where = span(data, random, 64)
    changed[where] = random.bytes(where.stop - where.start)
    return bytes(changed)


def truncate(data: bytes, random: Random) -> bytes:
    return data[: place(data, random)]


def behead(data: bytes, random: Random) -> bytes:
    return data[int(random.integers(1, 200)) :]


def delete(data: bytes, random: Random) -> bytes:
    where = span(data, random)
    return data[: where.start] + data[where.stop :]


def duplicate(data: bytes, random: Random) -> bytes:
    where = span(data, random)
    times = int(random.choice([1, 2, 20]))
    return data[: where.stop] + data[where] * times + data[where.stop :]


def move(data: bytes, random: Random) -> bytes:
    where = span(data, random)
    rest = data[: where.start] + data[where.stop :]
    into = place(rest, random)
    return rest[:into] + data[where] + rest[into:]


def insert_noise(data: bytes, random: Random) -> bytes:
    into = place(data, random)
    noise = random.bytes(int(random.integers(1, 3000)))
    return data[:into] + noise + data[into:]


def insert_zeros(data: bytes, random: Random) -> bytes:
    into = place(data, random)
    fill = bytes([int(random.choice([0, 0xFF, 0x20, 0x0A]))])
    return data[:into] + fill * int(random.choice([1, 64, 100_000])) + data[into:]


def twice(data: bytes, _random: Random) -> bytes:
    return data + data


def splice(data: bytes, random: Random, other: bytes) -> bytes:
    """The beginning of one and the end of another."""
    return data[: place(data, random)] + other[place(other, random) :]


DAMAGES: Mapping[str, Damage] = {
    each.__name__: each
    for each in (
        flip_bits,
        scribble,
        truncate,
        behead,
        delete,
        duplicate,
        move,
        insert_noise,
        insert_zeros,
        twice,
    )
}
