"""Identifiers that sort by the time of their making."""

import re
import secrets
import time

ALPHABET = "0123456789abcdefghjkmnpqrstvwxyz"
"""Base 32 without i, l, o, u, in the order of its bytes."""
FLIGHT_ID = re.compile(r"[0-7][0-9a-hjkmnp-tv-z]{25}")
KEY_ID = re.compile(r"[0-9a-hjkmnp-tv-z]{12}")
RANDOM_BITS = 80


def new_flight_id(at_s: float | None = None) -> str:
    """26 characters: milliseconds since 1970 (48 bits), then 80 random bits."""
    milliseconds = int((time.time() if at_s is None else at_s) * 1000) & (2**48 - 1)
    return _base_32((milliseconds << RANDOM_BITS) | secrets.randbits(RANDOM_BITS), 26)


def is_flight_id(given: str) -> bool:
    return FLIGHT_ID.fullmatch(given) is not None


def new_key_id() -> str:
    """12 random characters; it names a key and is no secret."""
    return _base_32(secrets.randbits(60), 12)


def is_key_id(given: str) -> bool:
    return KEY_ID.fullmatch(given) is not None


def _base_32(number: int, characters: int) -> str:
    return "".join(ALPHABET[(number >> 5 * place) & 31] for place in reversed(range(characters)))
