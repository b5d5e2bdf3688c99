"""Lists by pages: limit, cursor and `Link` (RFC 8288)."""

from urllib.parse import urlencode

from flask import Request, Response

from service.domain.errors import WrongValues
from service.storage.pages import MOST_ITEMS

DEFAULT_LIMIT = 50


def limit_of(request: Request) -> int:
    """`limit=`, 1 to 200."""
    text = request.args.get("limit")
    if text is None:
        return DEFAULT_LIMIT
    if not (text.isascii() and text.isdigit() and len(text) < 10 and 1 <= int(text) <= MOST_ITEMS):
        raise WrongValues("The query is wrong.", {"/limit": f"must be a whole number, 1 to {MOST_ITEMS}"})
    return int(text)


def linked(answer: Response, request: Request, next_cursor: str | None) -> Response:
    """Point to the first and the next page, with the same filters."""
    same = {name: value for name, value in request.args.items() if name != "cursor"}
    links = [_link(request.path, same, "first")]
    if next_cursor is not None:
        links.append(_link(request.path, same | {"cursor": next_cursor}, "next"))
    answer.headers["Link"] = ", ".join(links)
    return answer


def _link(path: str, query: dict[str, str], relation: str) -> str:
    return f'<{path}?{urlencode(query)}>; rel="{relation}"' if query else f'<{path}>; rel="{relation}"'
