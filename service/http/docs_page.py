"""The OpenAPI document in the order and words of a page for people."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup, escape

Json = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Kind:
    """A type in words, with the schema it leads to, if any."""

    words: str
    link: str | None = None


@dataclass(frozen=True, slots=True)
class Row:
    name: str
    required: bool
    kind: Kind
    text: str


@dataclass(frozen=True, slots=True)
class OperationText:
    method: str
    path: str
    summary: str
    text: str
    parameters: list[Row]
    bodies: list[Row]
    answers: list[Row]


@dataclass(frozen=True, slots=True)
class SchemaText:
    name: str
    text: str
    rows: list[Row]


def with_code(text: str) -> Markup:
    """Text with its `names` as code."""
    pieces = str(escape(text)).split("`")
    if len(pieces) % 2 == 0:
        return Markup("`").join(Markup(piece) for piece in pieces)
    return Markup("").join(Markup(f"<code>{piece}</code>" if odd % 2 else piece) for odd, piece in enumerate(pieces))


def operations_for_people(document: Json) -> list[OperationText]:
    """Every operation, in the document's order."""
    return [
        _operation(document, path, method, operation)
        for path, methods in document["paths"].items()
        for method, operation in methods.items()
    ]


def schemas_for_people(document: Json) -> list[SchemaText]:
    """Every schema with its fields, in alphabetical order."""
    schemas = document["components"]["schemas"]
    return [
        SchemaText(name, schemas[name].get("description", ""), list(_fields(schemas[name]))) for name in sorted(schemas)
    ]


def _operation(document: Json, path: str, method: str, operation: Json) -> OperationText:
    return OperationText(
        method=method.upper(),
        path=path,
        summary=operation["summary"],
        text=operation.get("description", ""),
        parameters=[
            Row(
                entry["name"],
                entry.get("required", False),
                Kind(f"{entry['in']}, {_kind(entry['schema']).words}"),
                entry.get("description", ""),
            )
            for entry in operation.get("parameters", [])
        ],
        bodies=list(_contents(operation.get("requestBody", {}).get("content", {}))),
        answers=[row for status, entry in operation["responses"].items() for row in _answers(document, status, entry)],
    )


def _answers(document: Json, status: str, entry: Json) -> Iterator[Row]:
    if "$ref" in entry:
        entry = document["components"]["responses"][_last(entry["$ref"])]
    if "content" not in entry:
        yield Row(status, False, Kind("no body"), entry["description"])
    for row in _contents(entry.get("content", {})):
        yield Row(f"{status} {row.name}", False, row.kind, entry["description"])


def _contents(content: Json) -> Iterator[Row]:
    for media_type, entry in content.items():
        schema = entry["schema"]
        yield Row(media_type, False, _kind(schema), schema.get("description", ""))


def _fields(schema: Json) -> Iterator[Row]:
    required = schema.get("required", [])
    for name, entry in schema.get("properties", {}).items():
        yield Row(name, name in required, _kind(entry), _field_text(entry))


def _field_text(entry: Json) -> str:
    bounds = [
        f"{words} {entry[key]:g}"
        for key, words in (("minimum", "at least"), ("exclusiveMinimum", "above"), ("maximum", "at most"))
        if key in entry
    ]
    text = entry.get("description", "")
    return f"{text} ({', '.join(bounds)})" if bounds else text


def _kind(schema: Json) -> Kind:
    """`number or null`, `list of Fault`, ..., one link at most."""
    if "$ref" in schema:
        name = _last(schema["$ref"])
        return Kind(name, name)
    for key in ("anyOf", "allOf", "oneOf"):
        if key in schema:
            kinds = [_kind(option) for option in schema[key]]
            link = next((kind.link for kind in kinds if kind.link), None)
            return Kind(" or ".join(kind.words for kind in kinds), link)
    return _plain_kind(schema)


def _plain_kind(schema: Json) -> Kind:
    if schema.get("type") == "array":
        inner = _kind(schema["items"])
        return Kind(f"list of {inner.words}", inner.link)
    if "enum" in schema:
        return Kind("one of " + ", ".join(str(choice) for choice in schema["enum"]))
    given = schema.get("type", "bytes")
    return Kind(" or ".join(given) if isinstance(given, list) else str(given))


def _last(reference: str) -> str:
    return reference.rpartition("/")[2]
