"""The application: `gunicorn 'service.app:create_app()'`."""

from flask import Flask
from threadpoolctl import threadpool_limits

from service.config import Config, config_from_environment
from service.http.access import guard
from service.http.aircraft import kept_aircraft
from service.http.documents import documents
from service.http.errors import register_errors
from service.http.flights import kept_flights
from service.http.headers import harden
from service.http.health import health
from service.http.reductions import reductions
from service.http.request_log import follow_requests
from service.http.spool import sweep
from service.keeping import Keeping
from service.log_lines import log_to_stderr


def create_app(config: Config | None = None) -> Flask:
    """Build the application.

    Parameters
    ----------
    config : settings; None reads them from the environment.
    """
    settings = config or config_from_environment()
    log_to_stderr(settings.log_level)
    # one thread per computation: the server's own threads and workers fill the processor
    threadpool_limits(1)
    sweep(settings.spool)
    app = Flask("service.http")
    app.url_map.merge_slashes = False
    register_errors(app)
    follow_requests(app)
    harden(app)
    keeping = Keeping(settings)
    app.extensions["keeping"] = keeping
    guard(app, settings, keeping)
    for blueprint in (
        reductions(settings),
        kept_flights(settings, keeping),
        kept_aircraft(settings, keeping),
        health(settings, keeping),
        documents(),
    ):
        app.register_blueprint(blueprint)
    return app
