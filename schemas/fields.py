"""Fields shared by all representations: numbers that are never NaN on the wire, estimates, codes, columns, flags."""

import math
from collections.abc import Collection
from datetime import UTC, datetime
from enum import Enum
from typing import Any, TypeVar

import numpy as np
from marshmallow import Schema, ValidationError, fields

from service.domain.arrays import FlagArray, FloatArray
from service.domain.codes import Flag
from service.domain.glossary import GLOSSARY
from service.domain.results import Estimate

SERIES_DECIMALS = 6
"""Digits kept in the series: a micrometre per second is far below any uncertainty and halves the answer."""

CodeT = TypeVar("CodeT", bound=Enum)


class Described(fields.Field[Any]):
    """A field whose sentence and unit come from the glossary, by its name, unless it has its own."""

    def _bind_to_schema(self, field_name: str, parent: Any) -> None:
        super()._bind_to_schema(field_name, parent)
        if "description" not in self.metadata:
            term = GLOSSARY[field_name]
            unit = "" if term.unit == "1" else f" [{term.unit}]"
            self.metadata = {"description": term.meaning + unit, **self.metadata}


class Number(Described):
    """A finite real number: booleans, text, NaN and infinities are refused on load; non-finite becomes null on dump.

    `above` is an exclusive lower bound, `at_least` and `at_most` are inclusive; all in the unit of the field's name.
    """

    default_error_messages = {  # noqa: RUF012 - marshmallow's own way
        "number": "must be a number",
        "finite": "must be finite",
        "above": "must be above {bound:g}",
        "at_least": "must be at least {bound:g}",
        "at_most": "must be at most {bound:g}",
    }

    def __init__(
        self,
        description: str | None = None,
        *,
        above: float | None = None,
        at_least: float | None = None,
        at_most: float | None = None,
        **kwargs: Any,
    ) -> None:
        self.above, self.at_least, self.at_most = above, at_least, at_most
        given = {"exclusiveMinimum": above, "minimum": at_least, "maximum": at_most}
        bounds = {name: bound for name, bound in given.items() if bound is not None}
        super().__init__(metadata=_own(description) | {"type": "number"} | bounds, **kwargs)

    def _serialize(self, value: Any, attr: str | None, obj: Any, **_kwargs: Any) -> float | None:  # noqa: ARG002
        if value is None:
            return None
        number = float(value)
        return number if math.isfinite(number) else None

    def _deserialize(self, value: Any, attr: str | None, data: Any, **_kwargs: Any) -> float:  # noqa: ARG002
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.make_error("number")
        try:
            number = float(value)
        except OverflowError as error:
            raise self.make_error("finite") from error
        if not math.isfinite(number):
            raise self.make_error("finite")
        self._check_bounds(number)
        return number

    def _check_bounds(self, number: float) -> None:
        if self.above is not None and not number > self.above:
            raise self.make_error("above", bound=self.above)
        if self.at_least is not None and number < self.at_least:
            raise self.make_error("at_least", bound=self.at_least)
        if self.at_most is not None and number > self.at_most:
            raise self.make_error("at_most", bound=self.at_most)


def _own(description: str | None) -> dict[str, Any]:
    return {} if description is None else {"description": description}


class Text(fields.String):
    """Text with a description; `longest` bounds its length on load, `one_of` publishes a closed list."""

    def __init__(
        self, description: str, *, longest: int | None = None, one_of: Collection[str] = (), **kwargs: Any
    ) -> None:
        metadata: dict[str, Any] = {"description": description}
        if one_of:
            metadata["enum"] = list(one_of)
        if longest is not None:
            metadata |= {"minLength": 1, "maxLength": longest}
        super().__init__(metadata=metadata, **kwargs)
        self.longest = longest

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        text = super()._deserialize(value, attr, data, **kwargs)
        if self.longest is not None and not 1 <= len(text) <= self.longest:
            raise ValidationError(f"must have 1 to {self.longest} characters")
        return text


class Answer(Schema):
    """A representation that we write: every field is always there, except those named in `sometimes`."""

    sometimes: tuple[str, ...] = ()

    def on_bind_field(self, field_name: str, field_obj: fields.Field[Any]) -> None:
        field_obj.required = field_name not in self.sometimes


class EstimateSchema(Answer):
    """A value with its uncertainty in the GUM's words."""

    class Meta:
        title = "Estimate"
        description = "A value with its standard uncertainty and its 95 % interval, in the unit that the name ends in."

    value = Number("Best estimate.")
    standard_uncertainty = Number("Standard uncertainty (GUM).")
    interval_95 = fields.List(
        Number("Bound.", allow_none=True),
        metadata={
            "description": "Interval that holds the truth in 95 % of cases: low, high.",
            "minItems": 2,
            "maxItems": 2,
        },
    )


class EstimateField(Described, fields.Nested):
    """An estimate, or null when it could not be made (never an object of nulls)."""

    def __init__(self, description: str | None = None, **kwargs: Any) -> None:
        super().__init__(EstimateSchema, allow_none=True, dump_default=None, metadata=_own(description), **kwargs)

    def _serialize(self, nested_obj: Any, attr: Any, obj: Any, **kwargs: Any) -> Any:  # type: ignore[override]
        if nested_obj is None or not _is_made(nested_obj):
            return None
        return super()._serialize(nested_obj, attr, obj, **kwargs)  # type: ignore[no-untyped-call]


def _is_made(estimate: Estimate) -> bool:
    return math.isfinite(estimate.value) and math.isfinite(estimate.standard_uncertainty)


class Code(fields.Enum[CodeT]):
    """A code of a closed list, which the published schema enumerates."""

    def __init__(self, codes: type[CodeT], description: str, **kwargs: Any) -> None:
        listed: list[str | None] = [str(code.value) for code in codes]
        metadata = {"description": description, "type": "string", "enum": listed}
        super().__init__(codes, by_value=fields.String, metadata=metadata, **kwargs)


class Instant(fields.Field[datetime]):
    """An instant in UTC as RFC 3339 text with `Z`."""

    def __init__(self, description: str, **kwargs: Any) -> None:
        super().__init__(metadata={"description": description, "type": "string", "format": "date-time"}, **kwargs)

    def _serialize(self, value: datetime | None, attr: str | None, obj: Any, **_kwargs: Any) -> str | None:  # noqa: ARG002
        if value is None:
            return None
        aware = value.replace(tzinfo=UTC) if value.tzinfo is None else value.astimezone(UTC)
        return aware.isoformat().replace("+00:00", "Z")


class Column(Described):
    """An (n,) array of a series. It stays an array: the encoder writes it without a Python object per sample at once.

    `decimals=None` keeps every digit (times are echoed as they came).
    """

    def __init__(self, description: str | None = None, *, decimals: int | None = SERIES_DECIMALS) -> None:
        items = {"type": ["number", "null"]}
        super().__init__(metadata=_own(description) | {"type": "array", "items": items})
        self.decimals = decimals

    def _serialize(self, value: FloatArray | None, attr: str | None, obj: Any, **_kwargs: Any) -> FloatArray | None:  # noqa: ARG002
        if value is None or self.decimals is None:
            return value
        rounded: FloatArray = np.round(value, self.decimals)
        return rounded


class FlagColumn(fields.Field[FlagArray]):
    """(n,) bit masks of `Flag`, written as one list of lower-case names per sample."""

    def __init__(self, description: str, **kwargs: Any) -> None:
        names = {"type": "string", "enum": [flag_name(flag) for flag in Flag]}
        items = {"type": "array", "items": names}
        super().__init__(metadata={"description": description, "type": "array", "items": items}, **kwargs)

    def _serialize(self, value: FlagArray | None, attr: str | None, obj: Any, **_kwargs: Any) -> Any:  # noqa: ARG002
        return None if value is None else flag_lists(value)


def flag_name(flag: Flag) -> str:
    """Name of a flag on the wire."""
    return str(flag.name).lower()


def flag_lists(masks: FlagArray) -> list[list[str]]:
    """Names per sample of (n,) bit masks; samples of equal mask share one list, so a million cost little."""
    unique, inverse = np.unique(masks, return_inverse=True)
    table = [[flag_name(flag) for flag in Flag if int(mask) & flag] for mask in unique]
    return [table[row] for row in inverse.tolist()]


def pointers(messages: Any, at: str = "") -> dict[str, str]:
    """Marshmallow's nested messages as JSON Pointer -> message; `_schema` messages point to their object."""
    if isinstance(messages, dict):
        found: dict[str, str] = {}
        for name, inner in messages.items():
            found |= pointers(inner, at if name == "_schema" else f"{at}/{escaped(str(name))}")
        return found
    listed = messages if isinstance(messages, list) else [messages]
    return {at: "; ".join(str(message).rstrip(".") for message in listed)}


def escaped(name: str) -> str:
    """A name as one reference token of a JSON Pointer (RFC 6901)."""
    return name.replace("~", "~0").replace("/", "~1")
