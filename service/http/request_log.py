"""An id for each request, and one line in the log when it is answered."""

import logging
import re
import time
import uuid

from flask import Flask, Response, g, request

from service.log_lines import ROOT, request_id

HEADER = "X-Request-Id"
_SANE = re.compile(r"[A-Za-z0-9._-]{1,64}")
_log = logging.getLogger(ROOT)


def follow_requests(app: Flask) -> None:
    """Take the client's id where it is sane, else make one; echo it; log one line per request."""

    @app.before_request
    def start() -> None:
        given = request.headers.get(HEADER, "")
        g.started = time.monotonic()
        request_id.set(given if _SANE.fullmatch(given) else uuid.uuid4().hex)

    @app.after_request
    def end(answer: Response) -> Response:
        answer.headers[HEADER] = request_id.get() or ""
        _log.info(
            "request",
            extra={
                "fields": {
                    "method": request.method,
                    "path": request.path,
                    "status": answer.status_code,
                    "duration_s": round(time.monotonic() - g.started, 6),
                    "bytes_in": g.get("received_bytes", 0),
                    "bytes_out": answer.content_length or 0,
                }
            },
        )
        return answer

    @app.teardown_request
    def forget(_error: BaseException | None) -> None:
        # the thread goes on to other work, whose lines are not this request's
        request_id.set(None)
