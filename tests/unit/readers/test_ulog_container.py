"""The container is read as pyulog reads it, but within limits and without a word."""

import struct
from pathlib import Path

import numpy as np
import pytest
from pyulog import ULog, core, exceptions

from service.domain.errors import LoiterwiseError, UnreadableInput
from service.readers import ulog_container
from service.readers.reading import no_progress
from service.readers.ulog_container import CONTAINER_ERRORS, load_container
from service.readers.ulog_fields import TIME, TOPIC_NAMES
from tests.synthetic.ulog_file import HEADER, Variant, message, write_ulog
from tests.unit.readers.example import circling_log

HEAD = HEADER + bytes(8)
TOPIC = TOPIC_NAMES[0].encode()
TIMED = TOPIC + b":" + TIME.kind.encode() + b" " + TIME.name.encode() + b";"
SOUND_FORMAT = message(b"F", TIMED + b"float a;")
SUBSCRIPTION = message(b"A", struct.pack("<BH", 0, 7) + TOPIC)


def flight(tmp_path: Path) -> bytes:
    path = tmp_path / "whole.bin"
    write_ulog(path, circling_log(20.0), Variant(second_probe="live", filler_bytes=20_000, dropouts=[(7.0, 300)]))
    return path.read_bytes()


def load(tmp_path: Path, content: bytes) -> ulog_container.Container:
    path = tmp_path / "log.bin"
    path.write_bytes(content)
    return load_container(path, no_progress)


def test_all_exceptions_of_the_library_are_mapped() -> None:
    own = [value for value in vars(exceptions).values() if isinstance(value, type) and issubclass(value, Exception)]
    assert own
    assert all(issubclass(error, CONTAINER_ERRORS) for error in own)


@pytest.mark.parametrize(
    "error",
    [
        struct.error,
        IndexError,
        KeyError,
        ValueError,
        TypeError,
        AttributeError,
        OverflowError,
        ZeroDivisionError,
        RecursionError,
        MemoryError,
        exceptions.ULogException,
        exceptions.ULogIncompatibleFlagException,
    ],
)
def test_whatever_the_library_raises_becomes_unreadable(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: type[Exception]
) -> None:
    def fail(*_: object) -> None:
        raise error("inside the library")

    monkeypatch.setattr(ULog, "_read_file_definitions", fail)
    with pytest.raises(UnreadableInput, match="cannot be decoded"):
        load(tmp_path, HEAD)


def test_an_unknown_incompatible_flag_is_unreadable(tmp_path: Path) -> None:
    flags = message(b"B", bytes(8) + b"\x02" + bytes(7) + bytes(24))
    with pytest.raises(UnreadableInput, match="newer reader"):
        load(tmp_path, HEAD + flags)


def test_private_names_of_the_library_are_still_there() -> None:
    for name in (
        "_MessageHeader",
        "_MessageAddLogged",
        "MessageFormat",
        "_MessageInfo",
        "_MessageParameterDefault",
        "MessageLogging",
        "MessageLoggingTagged",
        "_add_message_info_multiple",
        "_add_parameter_default",
        "_check_packet_corruption",
        "_read_file_data",
        "_load_file",
        "_UNPACK_TYPES",
    ):
        assert hasattr(ULog, name), name
    assert hasattr(ULog._MessageAddLogged, "_parse_format")
    blank = ULog(None)
    for name in ("_logged_messages", "_logged_messages_tagged", "_changed_parameters", "_dropouts", "_subscriptions"):
        assert hasattr(blank, name), name
    assert core.print is ulog_container._silent


def damaged(content: bytes, seed: int) -> bytes:
    random = np.random.default_rng(seed)
    changed = np.frombuffer(content, np.uint8).copy()
    places = random.integers(16, changed.size, random.integers(1, 6))
    changed[places] = random.integers(0, 256, places.size)
    cut = random.integers(changed.size // 2, changed.size) if seed % 3 == 0 else changed.size
    return changed[:cut].tobytes()


@pytest.mark.parametrize("seed", range(60))
def test_the_quick_way_gives_what_the_library_gives(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, seed: int) -> None:
    """Also with damage, and whichever way the damage is met."""
    content = damaged(flight(tmp_path), seed) if seed else flight(tmp_path)

    def loaded() -> list[tuple[str, int, bytes]] | str:
        try:
            container = load(tmp_path, content)
        except LoiterwiseError as error:
            return str(error)
        arrays = [
            (
                topic.name,
                topic.multi_id,
                b"".join(np.ascontiguousarray(array).tobytes() for array in topic.data.values()),
            )
            for topic in container.topics
        ]
        return [*arrays, ("cut", container.cut, b"")]

    quick = loaded()
    monkeypatch.setattr(ulog_container, "go_through", lambda *_: None)
    assert quick == loaded()
    if not seed:
        assert len(quick) > 8


def test_losses_are_as_the_library_has_them(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    content = flight(tmp_path)
    quick = load(tmp_path, content).dropouts
    monkeypatch.setattr(ulog_container, "go_through", lambda *_: None)
    assert quick == load(tmp_path, content).dropouts
    assert [loss.duration_s for loss in quick] == [0.3]
    assert quick[0].time_s == pytest.approx(57.0, abs=0.1)


def test_nothing_is_printed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for seed in range(1, 20):
        try:
            load(tmp_path, damaged(flight(tmp_path), seed))
        except LoiterwiseError:
            continue
    load(tmp_path, HEAD + message(b"D", b"\x01\x00" + bytes(20)) * 3)
    assert capsys.readouterr() == ("", "")


def test_progress_rises_to_the_end(tmp_path: Path) -> None:
    path = tmp_path / "log.bin"
    write_ulog(path, circling_log(20.0), Variant(filler_bytes=3_000_000))
    shares: list[float] = []
    load_container(path, shares.append)
    assert len(shares) > 3
    assert shares == sorted(shares)
    assert shares[-1] == 1.0


BIG_ARRAYS = b"".join(b"uint8_t[65535] a%d;" % number for number in range(1000))
NESTED = message(b"F", b"b:uint8_t[65535] x;") + message(b"F", b"c:b[65535] x;") + message(b"F", TIMED + b"c[65535] x;")
EMPTY_NESTED = (
    message(b"F", b"b:")
    + message(b"F", b"c:" + b"b x;" * 5000)
    + message(b"F", b"d:" + b"c x;" * 5000)
    + message(b"F", TIMED + b"d x;" * 5000)
)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (message(b"F", TOPIC + b":" + BIG_ARRAYS) + SUBSCRIPTION, "more than 2000 fields"),
        (NESTED + SUBSCRIPTION, "more than 2000 fields"),
        (EMPTY_NESTED + SUBSCRIPTION, "more than 2000 fields"),
        (message(b"F", TOPIC + b":" + TOPIC + b" x;") + SUBSCRIPTION, "contains itself"),
        (b"".join(message(b"F", b"a%d:int8_t a;" % n) for n in range(6000)), "kinds of message"),
        (SOUND_FORMAT + SUBSCRIPTION * 300, "more than 200 instances"),
    ],
    ids=["arrays", "nested arrays", "nested nothing", "recursion", "formats", "subscriptions"],
)
def test_bombs_are_refused_at_once(tmp_path: Path, content: bytes, words: str) -> None:
    with pytest.raises(UnreadableInput, match=words):
        load(tmp_path, HEAD + content)


def test_formats_that_nobody_needs_may_be_as_large_as_they_like(tmp_path: Path) -> None:
    other = message(b"F", b"other:" + BIG_ARRAYS) + message(b"A", struct.pack("<BH", 0, 9) + b"other")
    sample = message(b"D", struct.pack("<HQf", 7, 1_000_000, 2.5))
    container = load(tmp_path, HEAD + SOUND_FORMAT + other + SUBSCRIPTION + sample)
    assert [float(topic.data["a"][0]) for topic in container.topics] == [2.5]


@pytest.mark.parametrize("filling", [b"\x00", b"\xff"])
def test_damage_without_end_is_given_up_and_said(
    tmp_path: Path, filling: bytes, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(ulog_container, "DAMAGE_STEPS", 10_000)
    container = load(tmp_path, flight(tmp_path) + filling * 300_000)
    assert container.cut
    assert {len(topic.data[TIME.name]) for topic in container.topics} == {20, 100, 200, 400}


def test_strings_and_parameters_are_not_kept(tmp_path: Path) -> None:
    noise = (
        message(b"I", b"\x0echar[3] author" + b"abc")
        + message(b"P", b"\x0bint32_t own" + struct.pack("<i", 5))
        + message(b"L", b"6" + bytes(8) + b"words")
        + message(b"C", b"6" + bytes(10) + b"words")
    )
    path = tmp_path / "log.bin"
    path.write_bytes(HEAD + noise + SOUND_FORMAT + SUBSCRIPTION + noise * 50)
    with path.open("rb") as file:
        log = ulog_container._BoundedULog(file, path.stat().st_size)
    assert not log.msg_info_dict.get("author")
    assert not log.initial_parameters.get("own")
    assert not log.changed_parameters
    assert not log.logged_messages
    assert not any(log.logged_messages_tagged.values())
