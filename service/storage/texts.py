"""Texts that clients give and that are kept: what may be in them."""

from service.domain.errors import WrongValues

LONGEST_NAME = 100
LONGEST_REASON = 1000
LONGEST_KEY = 255


def is_name(text: str) -> bool:
    """Usable as one segment of a path: printable, no slash, no blanks at its ends, no dots alone."""
    return (
        0 < len(text) <= LONGEST_NAME
        and text.isprintable()
        and text == text.strip()
        and "/" not in text
        and text not in (".", "..")
    )


def aircraft_name(text: str) -> str:
    """`text`, if an aircraft may be called so. Raises WrongValues at /aircraft."""
    if not is_name(text):
        message = f"1 to {LONGEST_NAME} printable characters, without / and without blanks at the ends."
        raise WrongValues("The name of the aircraft cannot be used.", {"/aircraft": message})
    return text


def reason(text: str) -> str:
    """`text`, if it says something and can be kept. Raises WrongValues at /reason."""
    return _told(text, "/reason", LONGEST_REASON)


def label(text: str) -> str:
    """What a key is for. Raises WrongValues at /label."""
    return _told(text, "/label", LONGEST_NAME)


def idempotency_key(text: str) -> str:
    """Raises WrongValues at /idempotency_key."""
    if not (0 < len(text) <= LONGEST_KEY and text.isascii() and text.isprintable()):
        message = f"1 to {LONGEST_KEY} printable ASCII characters."
        raise WrongValues("The idempotency key cannot be used.", {"/idempotency_key": message})
    return text


def _told(text: str, pointer: str, longest: int) -> str:
    told = text.strip()
    # line breaks are welcome; NUL and lone surrogates cannot be stored
    if not (0 < len(told) <= longest and all(sign.isprintable() or sign in "\n\t" for sign in told)):
        raise WrongValues("The text cannot be used.", {pointer: f"1 to {longest} printable characters."})
    return told
