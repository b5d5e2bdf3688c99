"""Schemas in words."""

from typing import Any

import pytest

from service.http.docs_page import Kind, _kind, operations_for_people, schemas_for_people, with_code
from service.http.openapi import openapi_document

REFERENCE = {"$ref": "#/components/schemas/Fault"}


@pytest.mark.parametrize(
    ("schema", "kind"),
    [
        ({"type": "number"}, Kind("number")),
        ({"type": ["number", "null"]}, Kind("number or null")),
        ({"type": "string", "enum": ["a", "b"]}, Kind("one of a, b")),
        (REFERENCE, Kind("Fault", "Fault")),
        ({"type": "array", "items": REFERENCE}, Kind("list of Fault", "Fault")),
        ({"anyOf": [REFERENCE, {"type": "null"}]}, Kind("Fault or null", "Fault")),
        ({"description": "anything"}, Kind("bytes")),
    ],
)
def test_kinds(schema: dict[str, Any], kind: Kind) -> None:
    assert _kind(schema) == kind


@pytest.mark.parametrize(
    ("text", "marked"),
    [
        ("take `x` or `y`", "take <code>x</code> or <code>y</code>"),
        ("a < b `<script>`", "a &lt; b <code>&lt;script&gt;</code>"),
        ("a lone ` stays", "a lone ` stays"),
        ("", ""),
    ],
)
def test_names_become_code(text: str, marked: str) -> None:
    assert with_code(text) == marked


def test_nothing_is_left_out() -> None:
    document = openapi_document()
    assert len(operations_for_people(document)) == sum(len(methods) for methods in document["paths"].values())
    assert [schema.name for schema in schemas_for_people(document)] == sorted(document["components"]["schemas"])
    reduce = operations_for_people(document)[0]
    assert [row.name for row in reduce.bodies] == list(
        document["paths"]["/v1/reductions"]["post"]["requestBody"]["content"]
    )
    assert {row.name.split()[0] for row in reduce.answers} >= {"200", "400", "422", "503"}
