"""Query parameters: names that are not known, or come twice, are refused, so that a typo is not silently ignored."""

from collections.abc import Collection

from flask import Request

from schemas.parts import PARTS
from service.domain.errors import WrongValues


def require_known(request: Request, known: Collection[str]) -> None:
    """`WrongValues` for a parameter that is not in `known` or comes twice."""
    errors = {f"/{name[:64]}": "is no parameter of this call" for name in request.args if name not in known}
    for name in known:
        if len(request.args.getlist(name)) > 1:
            errors[f"/{name}"] = "is given twice"
    if errors:
        raise WrongValues("The query is wrong.", errors)


def include_parts(request: Request) -> frozenset[str]:
    """The parts named by `include=`, comma-separated; blanks between commas are ignored."""
    named = [name.strip() for name in request.args.get("include", "").split(",")]
    unknown = [name for name in named if name and name not in PARTS]
    if unknown:
        known = ", ".join(PARTS)
        raise WrongValues("The query is wrong.", {"/include": f"{unknown[0][:64]!r} is none of {known}"})
    return frozenset(name for name in named if name)
