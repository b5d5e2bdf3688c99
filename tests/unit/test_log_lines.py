"""Log lines are JSON objects that know their request."""

import json
import logging
import logging.config
import sys
from collections.abc import Iterator

import pytest

from service.log_lines import JsonLines, log_settings, request_id


@pytest.fixture
def current() -> Iterator[str]:
    token = request_id.set("this-one")
    yield "this-one"
    request_id.reset(token)


def line(record: logging.LogRecord) -> dict[str, object]:
    text = JsonLines().format(record)
    assert "\n" not in text
    parsed: dict[str, object] = json.loads(text)
    return parsed


def record(message: str, **more: object) -> logging.LogRecord:
    made = logging.LogRecord("some.library", logging.WARNING, __file__, 1, message, (), None)
    made.__dict__.update(more)
    return made


def test_a_line(current: str) -> None:
    parsed = line(record("two\nlines", fields={"status": 200}))
    assert parsed["message"] == "two\nlines"
    assert (parsed["level"], parsed["logger"], parsed["status"]) == ("warning", "some.library", 200)
    assert parsed["request_id"] == current
    assert str(parsed["time"]).endswith("+00:00")


def test_outside_of_a_request() -> None:
    assert "request_id" not in line(record("idle"))


def test_a_traceback() -> None:
    try:
        _ = 1 / 0
    except ZeroDivisionError:
        parsed = line(record("failed", exc_info=sys.exc_info()))
    assert "ZeroDivisionError" in str(parsed["traceback"])


def test_values_that_json_does_not_know() -> None:
    assert (
        line(
            record(
                "odd",
                fields={
                    "path": {
                        1,
                    }
                },
            )
        )["path"]
        == "{1}"
    )


def test_settings_are_what_the_standard_library_takes() -> None:
    assert logging.config.DictConfigurator(log_settings("INFO")).config["root"]["handlers"] == ["stderr"]
