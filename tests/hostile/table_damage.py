"""Damage to a CSV: delimiters, quotes, numbers of other places, line ends, headers, encodings."""

from collections.abc import Callable, Mapping

from tests.hostile.bytes_damage import Damage, Random

CELLS = (
    *("NaN", "inf", "-inf", "1e308", "-1e308", "1e400", "1e-400", "9" * 400, "1,5", "1.234.567,8", "1'000"),
    # digits and signs of other scripts: numbers to Python, to no instrument
    *("0x1F", "1_000", "\uff11\uff12", "\u0663", "\u22125", "TRUE", "=1+1", "#REF!", '"', '""', '"1', "a\0b"),
    *("\ud7ff", "x" * 70_000, " ", "null", "--1", "1 2", "12:34:56", "2026-05-04T09:12:00Z", "-0", "+1", ".5"),
    *("5.", "1d5", "\u221e", "\ufeff1"),
)
HEADINGS = (
    "",
    "time_s",
    "TIME_S",
    "time",
    "impact_pressure_pa",
    "fix",
    "x" * 300,
    "名",
    "/",
    "~",
    "\0",
    '"',
    "1",
    "NaN",
)
UNITS = ("", "s", "Pa", "kt", "[hPa]", "inH2O", "g", "1", "bananas", "x" * 300)


def _lines(data: bytes) -> list[str]:
    return data.decode("utf-8", "replace").split("\n")


def _text(lines: list[str], end: str = "\n") -> bytes:
    return end.join(lines).encode("utf-8", "surrogatepass")


def _pick(choices: tuple[str, ...], random: Random) -> str:
    return choices[int(random.integers(0, len(choices)))]


def delimiters(data: bytes, random: Random) -> bytes:
    new = _pick((";", "\t", "|", " ", ":", ",,", "  ", "\x01"), random)
    lines = _lines(data)
    start = int(random.integers(0, len(lines))) if random.random() < 0.5 else 0
    return _text([line.replace(",", new) if number >= start else line for number, line in enumerate(lines)])


def decimal_commas(data: bytes, random: Random) -> bytes:
    text = "\n".join(_lines(data))
    if random.random() < 0.6:
        text = text.replace(",", ";")
    return text.replace(".", ",").encode()


def quotes(data: bytes, random: Random) -> bytes:
    lines = _lines(data)
    for index in random.integers(0, len(lines), int(random.choice([1, 10, 200]))).tolist():
        at = int(random.integers(0, len(lines[index]) + 1))
        lines[index] = lines[index][:at] + _pick(('"', '""', '","', '"\r', "'", '\\"'), random) + lines[index][at:]
    return _text(lines)


def all_quoted(data: bytes, _random: Random) -> bytes:
    return _text([",".join(f'"{cell}"' for cell in line.split(",")) for line in _lines(data)])


def cells(data: bytes, random: Random) -> bytes:
    lines = _lines(data)
    for _ in range(int(random.choice([1, 5, 100]))):
        index = int(random.integers(0, len(lines)))
        row = lines[index].split(",")
        row[int(random.integers(0, len(row)))] = _pick(CELLS, random)
        lines[index] = ",".join(row)
    return _text(lines)


def column(data: bytes, random: Random) -> bytes:
    """One column all of the same cell."""
    lines, cell = _lines(data), _pick((*CELLS[:10], "", "0", "5"), random)
    place = int(random.integers(0, lines[0].count(",") + 1))
    rows = [line.split(",") for line in lines]
    changed = [[*row[:place], cell, *row[place + 1 :]] if n and len(row) > place else row for n, row in enumerate(rows)]
    return _text([",".join(row) for row in changed])


def line_ends(data: bytes, random: Random) -> bytes:
    ends = ("\r\n", "\r", "\n\n", "\n\r", "\x0b", "\x0c", "\u2028", "\x85", "\x1c")
    if random.random() < 0.5:
        return _text(_lines(data), _pick(ends, random))
    return "".join(line + _pick((*ends, "\n", "\n"), random) for line in _lines(data)).encode()


def row_order(data: bytes, random: Random) -> bytes:
    head, *rows = [*_lines(data), ""]
    way = int(random.integers(0, 4))
    if way == 0:
        rows = [rows[index] for index in random.permutation(len(rows)).tolist()]
    elif way == 1:
        rows.reverse()
    else:
        for index in random.integers(0, len(rows), int(random.choice([1, 20]))).tolist():
            rows.insert(index, rows[index] if way == 2 else head)
    return _text([head, *rows])


def headings(data: bytes, random: Random) -> bytes:
    head, *rows = _lines(data)
    names = head.split(",")
    for _ in range(int(random.integers(1, 4))):
        names[int(random.integers(0, len(names)))] = _pick(HEADINGS, random)
    way = int(random.integers(0, 5))
    top = {
        0: ["# " + head],
        1: [],
        2: ["sep=" + _pick((",", ";", "x", ""), random), ",".join(names)],
        3: [head.upper()],
    }
    return _text([*top.get(way, [",".join(names)]), *rows])


def unit_row(data: bytes, random: Random) -> bytes:
    head, *rows = _lines(data)
    return _text([head, ",".join(_pick(UNITS, random) for _ in head.split(",")), *rows])


def widths(data: bytes, random: Random) -> bytes:
    """Rows with cells too many or too few, or a great many columns."""
    lines = _lines(data)
    if random.random() < 0.3:
        extra = int(random.choice([10, 990, 3000]))
        return _text(
            [lines[0] + "".join(f",c{n}" for n in range(extra)), *(line + "," * extra for line in lines[1:60])]
        )
    for index in random.integers(0, len(lines), 5).tolist():
        row = lines[index].split(",")
        lines[index] = ",".join(row[: int(random.integers(0, len(row)))] if random.random() < 0.5 else row * 2)
    return _text(lines)


def comments(data: bytes, random: Random) -> bytes:
    lines = _lines(data)
    for index in random.integers(0, len(lines), int(random.choice([1, 300]))).tolist():
        lines.insert(index, _pick(("# words", "", "   ", "% x", "// y", "#" * 60_000, "\t\t", ",,,,", '#"'), random))
    return _text(lines)


def encodings(data: bytes, random: Random) -> bytes:
    text = data.decode("utf-8", "replace")
    ways: tuple[Callable[[], bytes], ...] = (
        lambda: b"\xef\xbb\xbf" + data,
        lambda: text.encode("utf-16"),
        lambda: text.encode("utf-16-le"),
        lambda: b"\xfe\xff" + text.encode("utf-16-be"),
        lambda: text.encode("utf-16")[:-1],
        lambda: text.encode("utf-32"),
        lambda: text.encode("utf-7"),
        lambda: ("µ°é" + text).encode("latin-1", "replace"),
        lambda: data.replace(b"1", b"\xff", 3),
        lambda: data.replace(b"1", b"\0"),
        lambda: text.encode("cp500", "replace"),
    )
    return ways[int(random.integers(0, len(ways)))]()


DAMAGES: Mapping[str, Damage] = {
    f"table {each.__name__}": each
    for each in (
        delimiters,
        decimal_commas,
        quotes,
        all_quoted,
        cells,
        column,
        line_ends,
        row_order,
        headings,
        unit_row,
        widths,
        comments,
        encodings,
    )
}
