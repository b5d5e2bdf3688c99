"""Pages of a list. A cursor holds the last item's place, so a page costs the same wherever it is in the list."""

import base64
import binascii
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

from service.domain.errors import WrongValues

T = TypeVar("T")
MOST_ITEMS = 200


@dataclass(frozen=True, slots=True)
class Page(Generic[T]):
    items: tuple[T, ...]
    next_cursor: str | None
    """None on the last page."""


def page_of(items: Sequence[T], limit: int, cursor_of: Callable[[T], str]) -> Page[T]:
    """A page from up to `limit` + 1 items: the one too many says that there is more."""
    shown = tuple(items[:limit])
    return Page(shown, cursor_of(shown[-1]) if len(items) > limit else None)


def checked_limit(limit: int) -> int:
    """Raises WrongValues outside 1 to 200."""
    if not 1 <= limit <= MOST_ITEMS:
        raise WrongValues("The limit is out of range.", {"/limit": f"It must be 1 to {MOST_ITEMS}."})
    return limit


def write_cursor(kind: str, place: str) -> str:
    """An opaque text for `place` in the list of `kind`."""
    return base64.urlsafe_b64encode(f"{kind}:{place}".encode()).decode().rstrip("=")


def read_cursor(kind: str, cursor: str, is_place: Callable[[str], Any]) -> str:
    """The place that `write_cursor` wrote. Raises WrongValues for anything else."""
    try:
        text = base64.b64decode(cursor + "=" * (-len(cursor) % 4), altchars=b"-_", validate=True).decode()
    except (binascii.Error, ValueError):
        text = ""
    named, _, place = text.partition(":")
    if named != kind or not is_place(place):
        raise WrongValues("The cursor is none of this list's.", {"/cursor": "Take it from `next` of a page."})
    return place
