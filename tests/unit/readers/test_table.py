"""Tables: any delimiter, decimal mark, encoding; foreign names and units; errors say where."""

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.domain.codes import LogFormat
from service.domain.errors import InputTooLarge, LoiterwiseError, UnreadableInput, WrongValues
from service.domain.log import DecodedLog
from service.domain.settings import ColumnMeaning
from service.readers import table_cells
from service.readers.limits import ReadingLimits
from service.readers.registry import read_log
from service.readers.table_cells import parse_block
from service.readers.table_columns import TableColumn
from service.readers.table_layout import Layout
from service.readers.units import SAME
from tests.unit.readers.example import as_batch, as_table, circling_log

HEADER = "time_s,impact_pressure_pa,velocity_north_mps,velocity_east_mps"


def read(
    tmp_path: Path, text: str | bytes, columns: dict[str, ColumnMeaning] | None = None, **limits: int
) -> DecodedLog:
    path = tmp_path / "table.bin"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_log(path, sha256="s", columns=columns, limits=ReadingLimits(**limits)).log


def refused(tmp_path: Path, text: str | bytes, columns: dict[str, ColumnMeaning] | None = None) -> WrongValues:
    with pytest.raises(WrongValues) as caught:
        read(tmp_path, text, columns)
    return caught.value


@pytest.mark.parametrize(
    ("delimiter", "decimal"), [(",", "."), (";", "."), (";", ","), ("\t", "."), ("\t", ","), ("|", ".")]
)
@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16"])
def test_all_columns_of_the_contract_are_taken_as_given(
    tmp_path: Path, delimiter: str, decimal: str, encoding: str
) -> None:
    expected = circling_log(20.0)
    log = read(tmp_path, as_table(expected, delimiter, decimal).encode(encoding))
    assert log.format is LogFormat.CSV
    for stream, columns in as_batch(expected).items():
        for column, values in columns.items() if stream != "start_utc" else ():
            np.testing.assert_array_equal(getattr(getattr(log, stream), column), np.array(values, dtype=float))
    assert (log.start_utc, log.truncated, log.time_steps_back) == (None, False, 0)


def rows(log: DecodedLog) -> list[list[float]]:
    assert log.probe is not None
    assert log.gps is not None
    return [
        log.probe.time_s.tolist(),
        log.probe.impact_pressure_pa.tolist(),
        log.gps.time_s.tolist(),
        log.gps.velocity_north_mps.tolist(),
    ]


WANTED = [[0.0, 0.5, 1.0], [100.0, 101.5, 102.0], [0.0, 1.0], [10.0, 12.0]]


@pytest.mark.parametrize(
    "text",
    [
        f"{HEADER}\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n",
        f"{HEADER}\r\n0,100,10,1\r\n0.5,101.5,,\r\n1,102,12,1\r\n",
        f"{HEADER}\r0,100,10,1\r0.5,101.5,,\r1,102,12,1\r",
        f"{HEADER}\n0,100,10,1\n0.5,101.5,,\n1,102,12,1",
        f"# made somewhere\n\n{HEADER}\n0,100,10,1\n# a word\n0.5,101.5,,\n\n1,102,12,1\n,,,\n",
        f"sep=,\n{HEADER}\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n",
        f"# {HEADER}\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n",
        f"{HEADER},\n0,100,10,1,\n0.5,101.5,,,\n1,102,12,1,\n",
        f"{HEADER}\n0,100,10,1,\n0.5,101.5,,,\n1,102,12,1,\n",
        f"{HEADER}\n0, 100 , 10, 1\n0.5, 101.5, ,  \n 1,\t102, 12, 1\n",
        f"{HEADER}\n0,100,10,1\n0.5,101.5,NaN,nan\n1,102,12,1\n",
        f"{HEADER}\n0,100,10,1\n0.5,101.5,NA,null\n1,102,12,1\n",
        '"time_s","impact_pressure_pa","velocity_north_mps","velocity_east_mps"\n"0","100",10,1\n0.5,"101.5",,""\n1,102,12,1\n',
        f"{HEADER}\ns,Pa,m/s,m/s\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n",
        f"{HEADER}\n[s],[Pa],[m/s],[m/s]\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n",
        f"{HEADER},note\n0,100,10,1,take off\n0.5,101.5,,,\n1,102,12,1,\"quoted, with a comma\"\n",
        "velocity_east_mps,impact_pressure_pa,time_s,velocity_north_mps\n1,100,0,10\n,101.5,0.5,\n1,102,1,12\n",
        "Time_s,Impact_Pressure_Pa,velocity_north_mps,velocity_east_mps\n0,1e2,10,1\n0.5,1.015E2,,\n1,102,12,1\n",
        HEADER.replace(",", "  ") + "\n0 100 10 1\n 0.5 101.5 nan nan\n1\t102  12 1\n",
        "time_s;impact_pressure_pa;velocity_north_mps;velocity_east_mps\n0;100;10;1\n0,5;101,5;;\n1;102;12;1\n",
        'time_s;impact_pressure_pa;velocity_north_mps;velocity_east_mps\n0;"100";10;1\n"0,5";"101,5";;\n1;102;12;1\n',
    ],
)  # fmt: skip
def test_every_way_to_write_the_same_table(tmp_path: Path, text: str) -> None:
    assert rows(read(tmp_path, text)) == WANTED


def test_foreign_names_and_units(tmp_path: Path) -> None:
    text = (
        "Zeit [ms];Staudruck;V Grund;Kurs;Höhe;Temp °C;nz;Feuchte;egal\n"
        "0;1,5;20;90;1000;15;1,0;45;x\n"
        "100;1,6;20;180;1010;15,5;1,2;50;y\n"
    )
    columns = {
        "Zeit [ms]": ColumnMeaning("time", "ms"),
        "Staudruck": ColumnMeaning("impact_pressure_pa", "hPa"),
        "V Grund": ColumnMeaning("ground_speed", "kt"),
        "Kurs": ColumnMeaning("track_deg"),
        "Höhe": ColumnMeaning("altitude", "ft"),
        "Temp °C": ColumnMeaning("air_temperature", "°C"),
        "nz": ColumnMeaning("load_factor", "g"),
        "Feuchte": ColumnMeaning("relative_humidity", "%"),
    }
    for encoding in ("utf-8", "latin-1"):
        log = read(tmp_path, text.encode(encoding), columns)
        assert log.probe is not None
        assert log.gps is not None
        assert log.gps.altitude_m is not None
        assert log.temperature is not None
        assert log.temperature.relative_humidity is not None
        assert log.load_factor is not None
        np.testing.assert_allclose(log.probe.time_s, [0.0, 0.1])
        np.testing.assert_allclose(log.probe.impact_pressure_pa, [150.0, 160.0])
        np.testing.assert_allclose(log.gps.velocity_east_mps, [20 * 1852 / 3600, 0.0], atol=1e-12)
        np.testing.assert_allclose(log.gps.altitude_m, [304.8, 307.848])
        np.testing.assert_allclose(log.temperature.air_temperature_k, [288.15, 288.65])
        np.testing.assert_allclose(log.temperature.relative_humidity, [0.45, 0.5])
        np.testing.assert_allclose(log.load_factor.load_factor, [1.0, 1.2])


def test_a_row_of_units_serves_where_the_user_says_none(tmp_path: Path) -> None:
    text = "t,qc,velocity_north_mps,velocity_east_mps\nms,hPa,m/s,m/s\n0,1,10,1\n100,2,10,1\n"
    columns = {"t": ColumnMeaning("time"), "qc": ColumnMeaning("impact_pressure")}
    log = read(tmp_path, text, columns)
    assert log.probe is not None
    assert log.probe.time_s.tolist() == [0.0, 0.1]
    assert log.probe.impact_pressure_pa.tolist() == [100.0, 200.0]
    error = refused(tmp_path, text, columns | {"qc": ColumnMeaning("impact_pressure", "Pa")})
    assert set(error.errors) == {"/qc"}


def test_a_row_of_units_against_the_name_is_refused(tmp_path: Path) -> None:
    error = refused(tmp_path, f"{HEADER}\nms,Pa,m/s,m/s\n0,1,10,1\n")
    assert set(error.errors) == {"/time_s"}


@pytest.mark.parametrize(
    ("text", "pointers", "words"),
    [
        ("impact_pressure_pa,velocity_north_mps,velocity_east_mps\n1,2,3\n", {"/time_s"}, "required"),
        ("time_s,velocity_north_mps,velocity_east_mps\n1,2,3\n", {"/impact_pressure_pa"}, "probe"),
        ("time_s,impact_pressure_pa\n1,2\n", {"/velocity_north_mps"}, "gps"),
        ("time_s,impact_pressure_pa,track_deg\n1,2,3\n", {"/ground_speed_mps"}, "beside track_deg"),
        (f"{HEADER},time_s\n0,1,2,3,4\n", {"/time_s"}, "second column"),
        (
            "time_s,impact_pressure_pa,velocity_north_mps,velocity_east\n0,1,2,3\n",
            {"/velocity_east"},
            "velocity_east_mps",
        ),
        (f"{HEADER},static_pressure_hpa\n0,1,2,3,4\n", {"/static_pressure_hpa"}, "static_pressure_pa"),
        (f"{HEADER},altitud_m\n0,1,2,3,4\n", {"/altitud_m"}, "altitude_m"),
        (f"{HEADER}\n0,1,2,3\n0.5,1,x2,3\n", {"/velocity_north_mps"}, "Line 3, column 3: 'x2'"),
        (f"{HEADER}\n0,1,2,3\n0.5,1,inf,3\n", {"/velocity_north_mps"}, "Line 3, column 3: 'inf'"),
        (f"{HEADER}\n0,1,2,3\n0.5,1,1e999,3\n", {"/velocity_north_mps"}, "Line 3, column 3: '1e999'"),
        (f"{HEADER}\n0,1,2,3\n0.5,1,1_0,3\n", {"/velocity_north_mps"}, "Line 3, column 3: '1_0'"),
        (f'{HEADER}\n0,1,2,3\n0.5,"1,000",2,3\n', {"/impact_pressure_pa"}, "Line 3, column 2: '1,000'"),
        (
            f"{HEADER.replace(',', ';')}\n0;1;2;3\n0,5;1.000,5;2;3\n",
            {"/impact_pressure_pa"},
            "Line 3, column 2: '1.000,5'",
        ),
        (f"{HEADER}\n0,1,2,3\n\n# c\n0.5,1,2\n1,1,2,3\n", set(), "Line 5 has 3 cells, the header has 4"),
        (f"{HEADER}\n0,1,2,3\n0.5,1,2,3,4\n", set(), "Line 3 has 5 cells"),
        (f"{HEADER}\n0,1,2,3\n,1,2,3\n", {"/time_s"}, "Line 3 has values but no time"),
        (f"{HEADER}\n0,1,2,3\n2,1,2,3\n1,1,2,3\n", {"/time_s"}, "line 4 stands before"),
        (f"{HEADER}\n0,1,2,3\n0,1,2,3\n", {"/time_s"}, "line 3 repeats"),
        (f"{HEADER}\n0,1,2,3\n1,3e5,2,3\n", {"/impact_pressure_pa"}, "line 3"),
        (f"{HEADER},static_pressure_pa\n0,1,2,3,\n1,1,2,3,1013.25\n", {"/static_pressure_pa"}, "line 3"),
        (f"{HEADER}\n0,1,2,3\n1e8,1,2,3\n", {"/time_s"}, "in seconds"),
    ],
)
def test_errors_say_what_and_where(tmp_path: Path, text: str, pointers: set[str], words: str) -> None:
    error = refused(tmp_path, text)
    assert set(error.errors) == pointers
    assert words in f"{error} {error.errors}"


@pytest.mark.parametrize(
    ("columns", "pointer", "words"),
    [
        ({"gone": ColumnMeaning("time", "s")}, "/settings/columns/gone", "no column of this name"),
        ({"a/b": ColumnMeaning("mass", "kg")}, "/settings/columns/a~1b", "Unknown quantity"),
        ({"a/b": ColumnMeaning("altitude", "kt")}, "/a~1b", "Unknown unit"),
        ({"a/b": ColumnMeaning("impact_pressure", "Pa")}, "/a~1b", "second column"),
    ],
)
def test_meanings_that_do_not_fit_are_refused(
    tmp_path: Path, columns: dict[str, ColumnMeaning], pointer: str, words: str
) -> None:
    error = refused(tmp_path, f"{HEADER},a/b\n0,1,2,3,4\n", columns)
    assert words in error.errors[pointer]


@pytest.mark.parametrize(
    "text",
    ["\n\n  \n", "# only\n# comments\n", "1,2,3\n4,5,6\n", "one,two\n1,2\n", "a plain sentence.\n", "x" * 100],
)
def test_what_is_no_table_of_ours_is_unreadable(tmp_path: Path, text: str) -> None:
    with pytest.raises(UnreadableInput):
        read(tmp_path, text)


def test_a_header_alone_is_an_empty_log(tmp_path: Path) -> None:
    log = read(tmp_path, HEADER)
    assert (log.probe, log.gps, log.truncated) == (None, None, False)


def test_columns_without_any_value_are_absent_streams(tmp_path: Path) -> None:
    log = read(tmp_path, f"{HEADER},static_pressure_pa,roll_deg\n0,1,2,3,,\n1,2,3,4,,5\n")
    assert log.static is None
    assert log.attitude is not None
    assert log.attitude.roll_deg.tolist() == [5.0]
    assert np.isnan(log.attitude.yaw_deg).all()


def test_a_last_line_that_is_cut_is_left_out_and_said(tmp_path: Path) -> None:
    whole = f"{HEADER}\n0,100,10,1\n0.5,101.5,,\n1,102,12,1\n"
    assert not read(tmp_path, whole[:-1]).truncated
    cut = read(tmp_path, whole[:-6])
    assert cut.truncated
    assert cut.probe is not None
    assert cut.probe.time_s.tolist() == [0.0, 0.5]


@pytest.mark.parametrize(
    ("text", "limits", "words"),
    [
        (f"{HEADER}\n0,1,2,3\n1,1,2,3\n", {"table_rows": 1}, "more than 1 rows"),
        (f"{HEADER}\n0,1,2,3\n", {"table_columns": 3}, "4 columns"),
        (f"{HEADER}\n0,1,2,3\n1,1,2,{'3' * 200}\n", {"line_characters": 100}, "Line 3 is longer than 100"),
        (f"{'x' * 200}\n", {"line_characters": 100}, "longer than 100"),
        (f"{HEADER}\n0,1,2,3\n1,1,2,3\n", {"samples_per_stream": 1}, "limit is 1"),
    ],
)
def test_limits(tmp_path: Path, text: str, limits: dict[str, int], words: str) -> None:
    with pytest.raises(InputTooLarge, match=words):
        read(tmp_path, text, None, **limits)


def test_blocks_join_without_a_seam(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    text = as_table(circling_log(20.0))
    whole = read(tmp_path, text)
    monkeypatch.setattr("service.readers.table.BLOCK_CHARACTERS", 97)
    parts = read(tmp_path, text)
    for stream in ("probe", "gps", "attitude"):
        for column in getattr(whole, stream).__slots__:
            found, expected = getattr(getattr(parts, stream), column), getattr(getattr(whole, stream), column)
            np.testing.assert_array_equal(found, expected)
    error = refused(tmp_path, text.replace("\n10.0,", "\nten,"))
    line = 1 + text[: text.index("\n10.0,")].count("\n") + 1
    assert f"Line {line}, column 1: 'ten'" in str(error)


@pytest.mark.parametrize("characters", [1, 1 << 20])
def test_the_one_time_axis_rises_for_all_streams_together(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, characters: int
) -> None:
    monkeypatch.setattr("service.readers.table.BLOCK_CHARACTERS", characters)
    for second in ("0", "-1"):
        error = refused(tmp_path, f"{HEADER}\n0,100,,\n{second},,10,1\n")
        assert "line 3" in str(error)


def test_a_heading_may_hold_delimiters(tmp_path: Path) -> None:
    text = f'"a;b;c;d;e;f;g",{HEADER},"p,q"\nx,0,100,10,1,\n,0.5,101.5,,,y\n,1,102,12,1,\n'
    assert rows(read(tmp_path, text)) == WANTED


CELLS = st.one_of(
    st.floats(allow_nan=False, allow_infinity=False, width=32).map(repr),
    st.integers(-(10**20), 10**20).map(str),
    st.sampled_from(
        ["", " ", "nan", "NA", "x", "inf", "1e400", '"2"', "1_0", "1.", ".5", "+3", "0x1", "1 2", "'", "#"]
    ),
)


@given(
    table=st.lists(st.lists(CELLS, min_size=1, max_size=4), min_size=1, max_size=6), delimiter=st.sampled_from(",;\t|")
)
@settings(max_examples=300, deadline=None)
def test_the_fast_way_gives_what_the_slow_way_gives(table: list[list[str]], delimiter: str) -> None:
    layout = Layout(delimiter, ("a", "b", "c"), None, "", 1)
    used = [TableColumn(index, name, "load_factor", SAME) for index, name in enumerate("ac")]
    text = "".join(delimiter.join(row) + "\n" for row in table)

    def parsed() -> tuple[list[list[float]], list[int]] | str:
        try:
            block = parse_block(text.split("\n"), 5, layout, used)
        except LoiterwiseError as error:
            return str(error)
        present = ~np.isnan(block.values).all(axis=1)
        return np.nan_to_num(block.values[present], nan=-7.0).tolist(), block.lines[present].tolist()

    fast = parsed()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(table_cells, "_parse_fast", lambda *_: None)
        assert fast == parsed()
