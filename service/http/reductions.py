"""`POST /v1/reductions`: a flight in, the whole answer out, nothing kept."""

from flask import Blueprint, Response, request

from schemas.reduction import dump_reduction
from service.config import Config
from service.http.answers import json_answer, require_json_accepted
from service.http.gate import Gate
from service.http.query import include_parts, require_known
from service.http.submission import received
from service.intake import reduce_file


def reductions(config: Config) -> Blueprint:
    blueprint = Blueprint("reductions", __name__)
    gate = Gate(config.reductions_at_once, config.wait_s)

    @blueprint.post("/v1/reductions")
    def create() -> Response:
        require_json_accepted(request)
        require_known(request, ("include",))
        include = include_parts(request)
        with received(request, config) as submission, gate.turn():
            reduction = reduce_file(submission.path, sha256=submission.sha256, settings=submission.settings)
            return json_answer(dump_reduction(reduction, include))

    return blueprint
