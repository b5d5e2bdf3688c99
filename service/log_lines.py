"""Log lines: one JSON object each, with the id of the request that they belong to."""

import json
import logging
import sys
from contextvars import ContextVar
from datetime import UTC, datetime
from typing import Any

request_id: ContextVar[str | None] = ContextVar("request_id", default=None)

ROOT = "loiterwise"
"""Name of the service's own logger."""


class JsonLines(logging.Formatter):
    """Time, level, logger, message, request id, the record's `fields`, and the traceback if there is one."""

    def format(self, record: logging.LogRecord) -> str:
        line: dict[str, Any] = {
            "time": datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds"),
            "level": record.levelname.lower(),
            "logger": record.name,
            "message": record.getMessage(),
        }
        if (current := request_id.get()) is not None:
            line["request_id"] = current
        line |= getattr(record, "fields", {})
        if record.exc_info:
            line["traceback"] = self.formatException(record.exc_info)
        return json.dumps(line, default=str)


def log_settings(level: str) -> dict[str, Any]:
    """Settings for `logging.config.dictConfig`: everything as JSON lines to standard error."""
    return {
        "version": 1,
        "disable_existing_loggers": False,
        "formatters": {"json": {"()": JsonLines}},
        "handlers": {"stderr": {"class": "logging.StreamHandler", "formatter": "json", "stream": "ext://sys.stderr"}},
        "root": {"level": "WARNING", "handlers": ["stderr"]},
        "loggers": {
            ROOT: {"level": level},
            "gunicorn.error": {"level": level, "propagate": True, "handlers": []},
            "gunicorn.access": {"level": "CRITICAL", "propagate": False, "handlers": []},
        },
    }


def log_to_stderr(level: str) -> None:
    """JSON lines of the service's own logger, unless the host program has set up logging."""
    logger = logging.getLogger(ROOT)
    logger.setLevel(level)
    if not logger.handlers and not logging.getLogger().handlers:
        handler = logging.StreamHandler(sys.stderr)
        handler.setFormatter(JsonLines())
        logger.addHandler(handler)
