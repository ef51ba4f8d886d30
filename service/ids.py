"""Identifiers of scans and jobs: unique, and sorted by the time they were made."""

from __future__ import annotations

import re
import secrets
import threading
import time
from typing import Final

# Crockford's base 32: no letter is mistaken for a digit; in ASCII order, so that text sorts like the number.
_ALPHABET: Final = "0123456789abcdefghjkmnpqrstvwxyz"
_LENGTH: Final = 26
_PATTERN: Final = re.compile(f"[{_ALPHABET}]{{{_LENGTH}}}")

_lock = threading.Lock()
_last = 0


def new_id() -> str:
    """Make an identifier: 48 bits of milliseconds since 1970, then 80 random bits, as 26 characters.

    Those made later in one process always sort later, also within a millisecond and when the clock is set back.
    """
    global _last
    with _lock:
        number = (time.time_ns() // 1_000_000) << 80 | secrets.randbits(80)
        if number <= _last:
            number = _last + 1 + secrets.randbits(32)
        _last = number
    digits = []
    for _ in range(_LENGTH):
        number, digit = divmod(number, 32)
        digits.append(_ALPHABET[digit])
    return "".join(reversed(digits))


def is_id(text: str) -> bool:
    """Whether a text has the form of an identifier."""
    return _PATTERN.fullmatch(text) is not None
