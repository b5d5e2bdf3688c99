"""The OpenAPI document, the same for people, and the first page. No scripts, nothing from elsewhere."""

from flask import Blueprint, Response, render_template

from schemas.wire import encode
from service.domain.codes import CAUTIONS
from service.http.docs_page import operations_for_people, schemas_for_people, with_code
from service.http.openapi import openapi_document, problem_kinds

REVALIDATE = "no-cache"


def documents() -> Blueprint:
    blueprint = Blueprint("documents", __name__)

    @blueprint.get("/v1/openapi.json")
    def openapi() -> Response:
        return _revalidated(Response(encode(openapi_document()), mimetype="application/json"))

    @blueprint.get("/docs")
    def docs() -> Response:
        document = openapi_document()
        page = render_template(
            "docs.html",
            info=document["info"],
            operations=operations_for_people(document),
            schemas=schemas_for_people(document),
            kinds=problem_kinds(),
            with_code=with_code,
        )
        return _revalidated(Response(page, mimetype="text/html"))

    @blueprint.get("/")
    def index() -> Response:
        return _revalidated(Response(render_template("index.html", cautions=CAUTIONS), mimetype="text/html"))

    return blueprint


def _revalidated(answer: Response) -> Response:
    answer.headers["Cache-Control"] = REVALIDATE
    return answer
