"""Types of columns that mean the same in SQLite and PostgreSQL."""

import json
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import BigInteger, DateTime, Dialect, Integer, String, Text
from sqlalchemy.types import TypeDecorator, TypeEngine


class UtcTime(TypeDecorator[datetime]):
    """An aware time. SQLite knows no zones: there it is text in UTC, which sorts as time does."""

    impl = DateTime(timezone=True)
    cache_ok = True

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        if value.tzinfo is None:
            raise ValueError("a time without its zone cannot be kept")
        in_utc = value.astimezone(UTC)
        return in_utc.replace(tzinfo=None) if dialect.name == "sqlite" else in_utc

    def process_result_value(self, value: datetime | None, dialect: Dialect) -> datetime | None:
        if value is None:
            return None
        return value.replace(tzinfo=UTC) if dialect.name == "sqlite" else value.astimezone(UTC)


class JsonText(TypeDecorator[Mapping[str, Any]]):
    """A JSON object as ASCII text: what a client escaped (NUL, lone surrogates) stays escaped in both databases."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: Mapping[str, Any] | None, dialect: Dialect) -> str | None:  # noqa: ARG002
        return None if value is None else json.dumps(dict(value), allow_nan=False, separators=(",", ":"))

    def process_result_value(self, value: str | None, dialect: Dialect) -> Mapping[str, Any] | None:  # noqa: ARG002
        if value is None:
            return None
        found: dict[str, Any] = json.loads(value)
        return found


def ordered_text(length: int | None = None) -> TypeEngine[str]:
    """Text compared byte by byte, whatever the locale of the database: pages hang on its order."""
    return String(length).with_variant(String(length, collation="C"), "postgresql")


def counting_integer() -> TypeEngine[int]:
    """A key that the database counts up; SQLite does so for INTEGER alone."""
    return BigInteger().with_variant(Integer(), "sqlite")
