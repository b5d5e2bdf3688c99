"""Conditional requests (RFC 9110, section 13): versions as strong entity tags."""

import hashlib

from flask import Request, Response

from service.http.failures import MissingPrecondition, PreconditionFailed

ABSENT = 0
"""The version of what must not exist yet."""


def version_tag(version: int) -> str:
    """Entity tag of a version, without its quotes."""
    return str(version)


def expected_version(request: Request, current: int | None) -> int | None:
    """The version that a change may replace, by `If-Match` and `If-None-Match`; None when neither is there.

    Parameters
    ----------
    current : the version that there is; None when there is nothing.

    Raises
    ------
    PreconditionFailed : the condition does not hold now.
    """
    if request.headers.get("If-None-Match") is not None:
        tags = request.if_none_match
        if current is not None and (tags.star_tag or tags.contains_weak(version_tag(current))):
            raise PreconditionFailed("It exists already, in a version that If-None-Match rules out.")
        return ABSENT if current is None else current
    if request.headers.get("If-Match") is None:
        return None
    if current is None or not (request.if_match.star_tag or request.if_match.contains(version_tag(current))):
        raise PreconditionFailed("It has been changed in the meantime: GET it again for its ETag.")
    return current


def require_version(expected: int | None, current: int | None) -> int:
    """The version that a change must replace. What exists is only changed by somebody who has seen it.

    Raises
    ------
    MissingPrecondition : it exists, and the request names no version.
    """
    if expected is None and current is not None:
        raise MissingPrecondition("It exists already: send its ETag as If-Match, so that no other change is lost.")
    return ABSENT if expected is None else expected


def tagged(answer: Response, version: int) -> Response:
    answer.set_etag(version_tag(version))
    return answer


def revalidated(answer: Response, request: Request) -> Response:
    """The answer with an entity tag of its content, or 304 when the client has just that."""
    if "ETag" not in answer.headers:
        answer.set_etag(hashlib.sha256(answer.get_data()).hexdigest()[:32])
    # private: keys decide who may see it; no-cache: it may change, so ask again
    answer.headers["Cache-Control"] = "private, no-cache"
    tag, _weak = answer.get_etag()
    if tag is not None and (request.if_none_match.star_tag or request.if_none_match.contains_weak(tag)):
        kept = {name: answer.headers[name] for name in ("ETag", "Cache-Control", "Vary") if name in answer.headers}
        return Response(status=304, headers=kept)
    return answer
