"""Canonical JSON (RFC 8785), fast: the standard library's encoder, put right where its numbers differ.

Python writes 1.0, 1e-05 and 1e+16 where RFC 8785 (that is, ECMAScript) writes 1, 0.00001 and 10000000000000000.
Everything else is the same (escapes, separators, order of keys) for text below U+D800, where the order of code points
is that of UTF-16 units. Whatever may not be is left to the `rfc8785` package, which also says what is wrong.
"""

import json
import re
from typing import Any

import rfc8785

# Strings are matched only to be passed over; of numbers, those that end in .0, have an exponent or are long integers.
ODD = re.compile(
    r'"[^"\\]*+(?:\\.[^"\\]*+)*+"'
    r"|(?<![\d.])-?\d++(?:\.0(?!\d)|(?:\.\d++)?e[+-]\d+)"
    r"|(?<![\d.])-?\d{16,}+(?![.e])"
)
SURROGATES = "\ud800"


class _Beyond(Exception):
    """Not a case for the fast way."""


def canonical(value: Any) -> bytes:
    """Canonical JSON of plain Python values. Raises ValueError for NaN and infinities."""
    try:
        text = json.dumps(value, ensure_ascii=False, allow_nan=False, sort_keys=True, separators=(",", ":"))
        if text.isascii() or max(text) < SURROGATES:
            return ODD.sub(_as_ecmascript, text).encode()
    except (TypeError, ValueError, _Beyond):
        pass
    return rfc8785.dumps(value)


def _as_ecmascript(match: re.Match[str]) -> str:
    token = match[0]
    if token[0] == '"':
        return token
    if token.endswith(".0"):
        return "0" if token == "-0.0" else token[:-2]
    if "e" in token:
        return rfc8785.dumps(float(token)).decode("ascii")
    raise _Beyond
