"""Damage to a ULog by someone who knows the container: sizes, kinds, formats, subscriptions, times, numbers."""

import struct
from collections.abc import Iterator, Mapping

from service.readers.ulog_fields import TIME, TOPIC_NAMES
from tests.hostile.bytes_damage import Damage, Random
from tests.synthetic.ulog_file import message

HEADER_BYTES = 16
HEAD = struct.Struct("<HB")
DATA, FORMAT, SUBSCRIPTION, FLAGS = (ord(kind) for kind in "DFAB")
NASTY_U64 = (0, 1, 1 << 31, 1 << 32, 1 << 62, 1 << 63, (1 << 64) - 1)
NASTY_F32 = tuple(
    struct.pack("<f", value) for value in (float("nan"), float("inf"), -float("inf"), 3e38, -3e38, 1e-45, 0.0)
)

Message = tuple[int, bytes]


def messages(data: bytes) -> Iterator[Message]:
    """Kind and payload of each message of a sound file; a cut one at the end is left out."""
    at = HEADER_BYTES
    while at + HEAD.size <= len(data):
        size, kind = HEAD.unpack_from(data, at)
        if at + HEAD.size + size > len(data):
            return
        yield kind, data[at + HEAD.size : at + HEAD.size + size]
        at += HEAD.size + size


def joined(data: bytes, parts: list[Message]) -> bytes:
    """The file of these messages, under the header of `data`."""
    return data[:HEADER_BYTES] + b"".join(message(bytes([kind]), payload[:65535]) for kind, payload in parts)


def _some(parts: list[Message], random: Random, kinds: tuple[int, ...] = ()) -> list[int]:
    """Indices of one to thirty messages (of these kinds)."""
    fitting = [index for index, (kind, _) in enumerate(parts) if not kinds or kind in kinds]
    if not fitting:
        return []
    count = min(len(fitting), int(random.integers(1, 30)))
    return [int(index) for index in random.choice(fitting, count, replace=False)]


def header(data: bytes, random: Random) -> bytes:
    changed = bytearray(data)
    place = int(random.integers(4, HEADER_BYTES))
    changed[place : place + 1] = random.bytes(1)
    if random.random() < 0.3:
        changed[8:16] = struct.pack("<Q", int(random.choice(NASTY_U64[:5])))
    return bytes(changed)


def sizes(data: bytes, random: Random) -> bytes:
    """Lengths that are lies, in the very head of a message."""
    changed, heads, at = bytearray(data), [], HEADER_BYTES
    for _, payload in messages(data):
        heads.append(at)
        at += HEAD.size + len(payload)
    for head in (
        random.choice(heads, min(len(heads), int(random.integers(1, 6))), replace=False).tolist() if heads else []
    ):
        changed[head : head + 2] = struct.pack("<H", int(random.choice([0, 1, 2, 3, 255, 4096, 65535])))
    return bytes(changed)


def kinds(data: bytes, random: Random) -> bytes:
    parts = list(messages(data))
    for index in _some(parts, random):
        letter = int(random.choice(list(b"DFAIMPQLCSORB\0\xff")))
        parts[index] = (letter, parts[index][1])
    return joined(data, parts)


def order(data: bytes, random: Random) -> bytes:
    """Messages shuffled, reversed, or the definitions last."""
    parts = list(messages(data))
    way = int(random.integers(0, 3))
    if way == 0:
        parts = [parts[index] for index in random.permutation(len(parts)).tolist()]
    elif way == 1:
        parts = [*(p for p in parts if p[0] != DATA), *reversed([p for p in parts if p[0] == DATA])]
    else:
        parts.sort(key=lambda part: part[0] != DATA)
    return joined(data, parts)


def lengths(data: bytes, random: Random) -> bytes:
    """Payloads too short or too long for their format, under honest sizes."""
    parts = list(messages(data))
    for index in _some(parts, random):
        kind, payload = parts[index]
        cut = payload[: int(random.integers(0, len(payload) + 1))]
        parts[index] = (
            kind,
            cut if random.random() < 0.5 else payload + random.bytes(int(random.choice([1, 100, 60_000]))),
        )
    return joined(data, parts)


def formats(data: bytes, random: Random) -> bytes:
    """Huge arrays, formats that contain themselves, unknown types, no time, text that is none."""
    parts = list(messages(data))
    name = str(random.choice(TOPIC_NAMES)).encode()
    time = f"{TIME.kind} {TIME.name};".encode()
    wild = (
        b"%s:%sfloat[1000000000] a;" % (name, time),
        b"%s:%sfloat[-1] a;" % (name, time),
        b"%s:%sfloat[] a;" % (name, time),
        b"%s:%s%s a;" % (name, time, name),
        b"%s:%snothing a;" % (name, time),
        b"%s:float a;" % name,
        b"%s:" % name,
        b"%s:%s;;;;" % (name, time),
        b"%s:%suint8_t[60000] a;" % (name, time),
        b"%s:%s%s" % (name, time, b"float a;" * 5000),
        b"%s:float %s;" % (name, TIME.name.encode()),
        b"\xff\xfe:\xff",
        b"no colon",
        b"",
    )
    for index in _some(parts, random, (FORMAT,))[:3]:
        parts[index] = (FORMAT, wild[int(random.integers(0, len(wild)))])
    if random.random() < 0.3:
        parts = [*_nest(int(random.choice([5, 12, 300])), name, time), *parts]
    return joined(data, parts)


def _nest(depth: int, name: bytes, time: bytes) -> list[Message]:
    """Each format holds ten of the next: unfolded it would fill any memory."""
    chain = [(FORMAT, b"n%d:n%d[10] a;" % (level, level + 1)) for level in range(depth)]
    return [*chain, (FORMAT, b"n%d:float a;" % depth), (FORMAT, b"%s:%sn0 a;" % (name, time))]


def type_swaps(data: bytes, random: Random) -> bytes:
    """A format whose types are others than the data were written with."""
    parts = list(messages(data))
    known = (b"float", b"double", b"uint64_t", b"uint8_t", b"bool", b"int32_t", b"char[3]", b"int16_t")
    for index in _some(parts, random, (FORMAT,)):
        old, new = random.choice(len(known), 2).tolist()
        parts[index] = (FORMAT, parts[index][1].replace(known[old], known[new]))
    return joined(data, parts)


def subscriptions(data: bytes, random: Random) -> bytes:
    """Thousands of them, instances and numbers repeated, names unknown or not even text."""
    parts = list(messages(data))
    count = int(random.choice([3, 150, 300, 5000]))
    names = (*(name.encode() for name in TOPIC_NAMES), b"unknown", b"\xff\xff", b"")
    added = [
        (SUBSCRIPTION, struct.pack("<BH", int(random.integers(0, 256)), int(random.integers(0, 65536))) + names[number])
        for number in random.integers(0, len(names), count).tolist()
    ]
    into = int(random.integers(0, len(parts) + 1))
    return joined(data, parts[:into] + added + parts[into:])


def renumber(data: bytes, random: Random) -> bytes:
    """Data under another stream's number."""
    parts = list(messages(data))
    for index in _some(parts, random, (DATA,)):
        kind, payload = parts[index]
        parts[index] = (kind, struct.pack("<H", int(random.choice([0, 1, 2, 3, 9, 65535]))) + payload[2:])
    return joined(data, parts)


def times(data: bytes, random: Random) -> bytes:
    """Time stamps zero, absurd, backward or repeated."""
    parts = list(messages(data))
    chosen = _some(parts, random, (DATA,)) if random.random() < 0.6 else range(len(parts))
    way, nasty = int(random.integers(0, 4)), int(random.choice(NASTY_U64[:5]))
    for index in chosen:
        kind, payload = parts[index]
        if kind != DATA or len(payload) < 10:
            continue
        (stamp,) = struct.unpack_from("<Q", payload, 2)
        jitter = int(random.integers(-(10**7), 10**7))
        changed = (nasty, (stamp + jitter) % (1 << 64), (10**9 - stamp) % (1 << 64), stamp * 1_000_003 % (1 << 64))[way]
        parts[index] = (kind, payload[:2] + struct.pack("<Q", changed) + payload[10:])
    return joined(data, parts)


def numbers(data: bytes, random: Random) -> bytes:
    """NaN, infinities and the largest numbers in the data."""
    parts = list(messages(data))
    everywhere = random.random() < 0.3
    nasty = NASTY_F32[int(random.integers(0, len(NASTY_F32)))]
    for index in range(len(parts)) if everywhere else _some(parts, random, (DATA,)):
        kind, payload = parts[index]
        if kind == DATA and len(payload) >= 16:
            at = 10 + 4 * int(random.integers(0, (len(payload) - 10) // 4))
            parts[index] = (kind, payload[:at] + nasty + payload[at + 4 :])
    return joined(data, parts)


def flags(data: bytes, random: Random) -> bytes:
    """Appended data announced where there are none, before the header, behind the end; unknown flags."""
    offsets = [int(random.choice([0, 5, 16, 60, len(data) // 2, len(data), 1 << 40, (1 << 63) - 1])) for _ in range(3)]
    payload = bytes(8) + bytes([int(random.choice([0, 1, 1, 1, 2, 255]))]) + bytes(7) + struct.pack("<3Q", *offsets)
    parts = [part for part in messages(data) if part[0] != FLAGS]
    return joined(data, [(FLAGS, payload), *parts])


def texts(data: bytes, random: Random) -> bytes:
    """Information, parameters and words of log with lengths and types that are lies."""
    parts = list(messages(data))
    for _ in range(int(random.choice([1, 50, 2000]))):
        kind = int(random.choice(list(b"IMPQLCSO")))
        key = random.choice([b"\xff", b"\x05char[", b"\x10char[999999] a", b"\x08float ab", b""])
        parts.insert(
            int(random.integers(0, len(parts) + 1)), (kind, bytes(key) + random.bytes(int(random.integers(0, 60))))
        )
    return joined(data, parts)


def drop_stream(data: bytes, random: Random) -> bytes:
    """All data of a stream gone, or all but one of its messages, or all data of all streams."""
    parts = list(messages(data))
    number = struct.pack("<H", int(random.integers(0, 8)))
    keep = int(random.integers(0, 3))
    mine = [
        index for index, (kind, payload) in enumerate(parts) if kind == DATA and (keep == 2 or payload[:2] == number)
    ]
    gone = set(mine[1:] if keep == 1 else mine)
    return joined(data, [part for index, part in enumerate(parts) if index not in gone])


DAMAGES: Mapping[str, Damage] = {
    f"ulog {each.__name__}": each
    for each in (
        header,
        sizes,
        kinds,
        order,
        lengths,
        formats,
        type_swaps,
        subscriptions,
        renumber,
        times,
        numbers,
        flags,
        texts,
        drop_stream,
    )
}
