"""`Idempotency-Key`: the same request again gets the same answer and does its work once."""

import hashlib
import json

from flask import Request

from service.domain.errors import WrongValues
from service.storage.idempotency import Once

HEADER = "Idempotency-Key"
LONGEST = 255


def once_of(request: Request, *said: object) -> Once | None:
    """The request's key with the hash of all that it says; None without a key.

    Parameters
    ----------
    said : what the request says: JSON values, such as hashes of its parts.
    """
    key = request.headers.get(HEADER)
    if key is None:
        return None
    plain = key.strip()
    if len(plain) >= 2 and plain[0] == plain[-1] == '"':
        # a string of RFC 8941, as the draft of the header has it
        plain = plain[1:-1]
    if not (0 < len(plain) <= LONGEST and plain.isascii() and plain.isprintable()):
        message = f"must have 1 to {LONGEST} printable ASCII characters"
        raise WrongValues("A header is wrong.", {f"/{HEADER}": message})
    words = json.dumps([request.method, request.path, *said], sort_keys=True, separators=(",", ":"))
    return Once(plain, hashlib.sha256(words.encode("utf-8", "surrogatepass")).hexdigest())
