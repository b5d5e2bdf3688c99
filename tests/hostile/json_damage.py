"""Damage to JSON: tokens that are none, and trees whose types, lengths, times or names are wrong."""

import copy
import json
import re
from collections.abc import Callable, Mapping
from typing import Any

from tests.hostile.bytes_damage import Damage, Random

TOKENS = (
    *(b"NaN", b"Infinity", b"-Infinity", b"1e400", b"-1e400", b"1e308", b"-1e308", b"1e-400", b"9" * 400),
    *(b"9" * 5000, b"0." + b"3" * 5000, b"18446744073709551616", b"9007199254740993", b"1e", b"1E+5", b"-", b"-0"),
    *(b"null", b"true", b"undefined", b'"x"', b'""', b'"\\ud800"', b'"\\u0000"', b'"\xff"', b"[]", b"{}", b"[[1]]"),
    *(b"01", b"+1", b".5", b"1.", b"0x10", b"1_0", b"1,", b"", b",", b"/* */ 1"),
    *(b"[" * 3000, b"[" * 200_000, b'{"a":' * 50_000),
)
VALUES: tuple[Any, ...] = (
    *(None, True, False, 0, -1, 3.0, -0.0, 1e308, -1e308, 1e-308, 1e11, 1e12, 10**30, 5e9),
    *("x", "", "1", "\ud800", "\0", "x" * 100_000),
    *([], {}, [None], [[]], [1, 2], {"value": 1}, {"time_s": []}),
)
NAMES = (
    "time_s",
    "probe",
    "",
    "\0",
    "\ud800",
    "x" * 5000,
    "settings",
    "__proto__",
    "$ref",
    "a/b~c",
    "fix",
    "impact_pressure_pa",
)

_NUMBER = re.compile(rb"-?\d+(?:\.\d+)?(?:e[-+]?\d+)?")
_PLACE = re.compile(rb'[{}\[\]:,"]')

Node = Any
TreeDamage = Callable[[Node, Random], Node]


def tokens(data: bytes, random: Random) -> bytes:
    """Numbers replaced by things that are no numbers, or none of JSON."""
    return _replaced(data, _NUMBER, random)


def marks(data: bytes, random: Random) -> bytes:
    """Brackets, colons and commas replaced."""
    return _replaced(data, _PLACE, random)


def _replaced(data: bytes, pattern: re.Pattern[bytes], random: Random) -> bytes:
    for _ in range(int(random.choice([1, 1, 1, 5]))):
        found = pattern.search(data, int(random.integers(0, max(len(data), 1)))) or pattern.search(data)
        if found:
            data = data[: found.start()] + TOKENS[int(random.integers(0, len(TOKENS)))] + data[found.end() :]
    return data


def _containers(node: Node, deepest: int = 6) -> list[Any]:
    """All objects and non-empty arrays of a tree."""
    if not isinstance(node, dict | list) or deepest == 0:
        return []
    inner = list(node.values() if isinstance(node, dict) else node[:3])
    return [*([node] if node else []), *(found for each in inner for found in _containers(each, deepest - 1))]


def _somewhere(tree: Node, random: Random) -> tuple[Any, Any] | None:
    """A container and a key or index within it."""
    found = _containers(tree)
    if not found:
        return None
    chosen = found[int(random.integers(0, len(found)))]
    keys = list(chosen) if isinstance(chosen, dict) else range(len(chosen))
    return chosen, keys[int(random.integers(0, len(keys)))]


def _column(tree: Node, random: Random) -> tuple[dict[str, Any], str] | None:
    """A stream and the name of one of its columns."""
    streams = [s for s in tree.values() if isinstance(s, dict) and isinstance(s.get("time_s"), list)]
    if not streams:
        return None
    stream = streams[int(random.integers(0, len(streams)))]
    names = [name for name, values in stream.items() if isinstance(values, list)]
    return stream, names[int(random.integers(0, len(names)))]


def swap_values(tree: Node, random: Random) -> Node:
    for _ in range(int(random.integers(1, 4))):
        if where := _somewhere(tree, random):
            where[0][where[1]] = copy.deepcopy(VALUES[int(random.integers(0, len(VALUES)))])
    return tree


def remove(tree: Node, random: Random) -> Node:
    for _ in range(int(random.integers(1, 4))):
        if where := _somewhere(tree, random):
            del where[0][where[1]]
    return tree


def rename(tree: Node, random: Random) -> Node:
    where = _somewhere(tree, random)
    if where and isinstance(where[0], dict):
        where[0][NAMES[int(random.integers(0, len(NAMES)))]] = where[0].pop(where[1])
    return tree


def graft(tree: Node, random: Random) -> Node:
    """A branch put where another belongs."""
    here, there = _somewhere(tree, random), _somewhere(tree, random)
    if here and there:
        here[0][here[1]] = copy.deepcopy(there[0][there[1]])
    return tree


def wrong_lengths(tree: Node, random: Random) -> Node:
    if where := _column(tree, random):
        values = where[0][where[1]]
        where[0][where[1]] = (values[:-1], values + values[:1], [], values[:1], values * 2)[int(random.integers(0, 5))]
    return tree


def short_streams(tree: Node, random: Random) -> Node:
    """Streams of none, one, two or three samples."""
    if where := _column(tree, random):
        kept = int(random.integers(0, 4))
        where[0].update({name: values[:kept] for name, values in where[0].items() if isinstance(values, list)})
    return tree


def shuffled_times(tree: Node, random: Random) -> Node:
    if where := _column(tree, random):
        times = where[0]["time_s"]
        index = int(random.integers(0, max(1, len(times) - 1)))
        ways: tuple[Callable[[], list[Any]], ...] = (
            lambda: times[::-1],
            lambda: [times[i] for i in random.permutation(len(times)).tolist()],
            lambda: times[: index + 1] + times[index:-1],
            lambda: [times[0]] * len(times) if times else [],
            lambda: [1e9 * t for t in times],
            lambda: [1e-9 * t for t in times],
            lambda: [t + 1e10 for t in times],
            lambda: [-t for t in times[::-1]],
            lambda: [*times[:-1], 1.2e6],
        )
        where[0]["time_s"] = ways[int(random.integers(0, len(ways)))]()
    return tree


def flat_columns(tree: Node, random: Random) -> Node:
    """A column of one value throughout: nothing, zero, the limit of what is possible."""
    if where := _column(tree, random):
        value = (None, 0, 0.0, 1, -1, 500, -500, 2e5, -2e5, 1e5, 150, 90, 1e308, 1e-300)[int(random.integers(0, 14))]
        where[0][where[1]] = [value] * len(where[0][where[1]])
    return tree


def wild_columns(tree: Node, random: Random) -> Node:
    """A column scaled, turned round, mixed with gaps, or drawn at random."""
    if where := _column(tree, random):
        values = where[0][where[1]]
        numbers = [0.0 if not isinstance(value, int | float) else value for value in values]
        factor = float(random.choice([-1.0, 0.0, 1e-12, 0.05, 30.0, 1e3]))
        ways: tuple[Callable[[], list[Any]], ...] = (
            lambda: [factor * value for value in numbers],
            lambda: numbers[::-1],
            lambda: [
                None if gap else value for gap, value in zip(random.random(len(numbers)) < 0.7, numbers, strict=True)
            ],
            lambda: (random.normal(0.0, 10.0 ** random.integers(-3, 5), len(numbers))).tolist(),
            lambda: [round(value, -1) for value in numbers],
            lambda: [value if n % 2 else -value for n, value in enumerate(numbers)],
        )
        if where[1] != "time_s":
            where[0][where[1]] = ways[int(random.integers(0, len(ways)))]()
    return tree


def windows(tree: Node, random: Random) -> Node:
    """Loiters and times of configurations without sense or number."""
    count = int(random.choice([0, 1, 50, 2000]))
    starts = random.uniform(-50.0, 100.0, count)
    ends = starts + random.choice([-1.0, 0.0, 1e-9, 5.0, 1e9])
    names = ("clean", "unknown", "flaps")
    settings = tree.get("settings")
    tree["settings"] = {**(settings if isinstance(settings, dict) else {})} | {
        "loiters": [{"start_s": s, "end_s": e} for s, e in zip(starts.tolist(), ends.tolist(), strict=True)],
        "configuration_times": [{"start_s": s, "name": names[n % 3]} for n, s in enumerate(starts.tolist())],
    }
    return tree


def settings_numbers(tree: Node, random: Random) -> Node:
    """Numbers of the settings at the ends of what floats can hold."""
    settings = tree.get("settings") or {}
    nasty = (1e-300, 1e300, -1e300, 0, 1e-9, 1e9, 5e-324, 1.7976931348623157e308, 0.05, 100)
    for branch in _containers(settings):
        for name in list(branch) if isinstance(branch, dict) else []:
            if isinstance(branch[name], int | float) and random.random() < 0.3:
                branch[name] = nasty[int(random.integers(0, len(nasty)))]
    return tree


def repeated_name(tree: Node, random: Random) -> bytes:
    """A name twice in an object: only text can say that."""
    text = json.dumps(tree).encode()
    name = str(random.choice(list(tree) or ["probe"]))
    return text[:-1] + b"," + json.dumps(name).encode() + b":" + json.dumps(tree.get(name)).encode() + b"}"


TREE_DAMAGES: tuple[TreeDamage, ...] = (
    swap_values,
    remove,
    rename,
    graft,
    wrong_lengths,
    short_streams,
    shuffled_times,
    flat_columns,
    wild_columns,
    windows,
    settings_numbers,
    repeated_name,
)


def _on_text(damage: TreeDamage) -> Damage:
    def damaged(data: bytes, random: Random) -> bytes:
        result = damage(json.loads(data), random)
        return result if isinstance(result, bytes) else json.dumps(result).encode()

    return damaged


DAMAGES: Mapping[str, Damage] = {"json tokens": tokens, "json marks": marks} | {
    f"json {each.__name__}": _on_text(each) for each in TREE_DAMAGES
}
