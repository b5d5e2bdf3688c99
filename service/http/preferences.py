"""`Prefer` (RFC 7240): does the client want to wait, and how long?"""

import re
from dataclasses import dataclass

from flask import Request, Response

_WAIT = re.compile(r'wait\s*=\s*"?(\d{1,9})"?')


@dataclass(frozen=True, slots=True)
class Preference:
    """`wait_s` None: the client says nothing of it."""

    respond_async: bool = False
    wait_s: float | None = None

    def wait(self, longest_s: float) -> float:
        """How long to wait for a result [s]: not at all when asked to answer at once, never longer than `longest_s`."""
        wanted = self.wait_s if self.wait_s is not None else 0.0 if self.respond_async else longest_s
        return min(wanted, longest_s)


def preference_of(request: Request) -> Preference:
    """What the request prefers. What is not understood is not there, as the RFC has it; of two the first counts."""
    tokens = [token.strip().lower() for line in request.headers.getlist("Prefer") for token in re.split("[,;]", line)]
    waits = [float(found[1]) for token in tokens if (found := _WAIT.fullmatch(token))]
    return Preference("respond-async" in tokens, waits[0] if waits else None)


def say_applied(answer: Response, preference: Preference) -> Response:
    """Name in `Preference-Applied` what was honoured, and that the answer depends on it."""
    applied = ["respond-async"] if preference.respond_async else []
    if preference.wait_s is not None:
        applied.append(f"wait={preference.wait_s:.0f}")
    if applied:
        answer.headers["Preference-Applied"] = ", ".join(applied)
    answer.vary.add("Prefer")
    return answer
