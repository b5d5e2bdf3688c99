"""Headers of every answer that tell browsers to be careful. No page of ours has a script."""

from flask import Flask, Response

ALWAYS = {
    "Content-Security-Policy": (
        "default-src 'none'; style-src 'self'; img-src 'self' data:; base-uri 'none'; form-action 'none'; "
        "frame-ancestors 'none'"
    ),
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Resource-Policy": "same-origin",
}


def harden(app: Flask) -> None:
    @app.after_request
    def add(answer: Response) -> Response:
        for name, value in ALWAYS.items():
            answer.headers.setdefault(name, value)
        return answer
