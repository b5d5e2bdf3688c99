"""Is the process alive, and can it take work?"""

from flask import Blueprint, Response

from schemas.health import LiveSchema, ReadySchema
from service.config import Config
from service.http.answers import json_answer
from service.http.spool import check_writable
from service.keeping import Keeping
from service.version import SERVICE


def health(config: Config, keeping: Keeping) -> Blueprint:
    blueprint = Blueprint("health", __name__)

    @blueprint.get("/v1/health/live")
    def live() -> Response:
        return json_answer(LiveSchema().dump({"status": "live"}))

    @blueprint.get("/v1/health/ready")
    def ready() -> Response:
        check_writable(config.spool)
        keeping.check()
        return json_answer(ReadySchema().dump({"status": "ready", "version": SERVICE}))

    return blueprint
