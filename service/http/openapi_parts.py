"""Pieces that the operations of the OpenAPI document are made of."""

from typing import Any

from service.http.errors import PROBLEM_JSON

Json = dict[str, Any]


def json_response(words: str, schema: str | Json, headers: Json | None = None) -> Json:
    """An answer in JSON; `schema` by name, or as it is."""
    described = reference(schema) if isinstance(schema, str) else schema
    return {
        "description": words,
        "headers": answer_headers() | (headers or {}),
        "content": {"application/json": {"schema": described}},
    }


def empty_response(words: str) -> Json:
    return {"description": words, "headers": answer_headers()}


def reference(schema: str) -> Json:
    return {"$ref": f"#/components/schemas/{schema}"}


def answer_headers() -> Json:
    return {"X-Request-Id": text_header("Id of this request.")}


def text_header(words: str) -> Json:
    return {"description": words, "schema": {"type": "string"}}


def problem_response(words: str) -> Json:
    content = {PROBLEM_JSON: {"schema": reference("Problem")}}
    return {"description": words, "headers": answer_headers(), "content": content}


def problems(statuses: tuple[int, ...]) -> Json:
    return {str(status): {"$ref": f"#/components/responses/{response_name(status)}"} for status in statuses}


def response_name(status: int) -> str:
    return f"Problem{status}"


def query(name: str, words: str, schema: Json) -> Json:
    return {"name": name, "in": "query", "description": words, "schema": schema}


def header(name: str, words: str, schema: Json | None = None) -> Json:
    return {"name": name, "in": "header", "description": words, "schema": schema or {"type": "string"}}


def in_path(name: str, words: str, schema: Json | None = None) -> Json:
    return {
        "name": name,
        "in": "path",
        "required": True,
        "description": words,
        "schema": schema or {"type": "string", "minLength": 1, "maxLength": 100},
    }
