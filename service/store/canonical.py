"""Canonical JSON (RFC 8785), fast: the standard library's encoder, given numbers that it writes as the RFC does.

Python writes 1.0, 1e-05 and 1e+16 where RFC 8785 (that is, ECMAScript) writes 1, 0.00001 and 10000000000000000. So
whole numbers are handed over as integers, and the few floats with an exponent as marked strings, whose marks and quotes
are taken off afterwards. Everything else is the same (escapes, separators, and the order of keys for text below U+D800,
where code points sort as UTF-16 units do). What is no case for this is left to the `rfc8785` package, which also says
what is wrong.
"""

import json
from typing import Any

import rfc8785

OPEN, CLOSE = "\ue000", "\ue001"  # private use: no one writes them, and where somebody does the package is asked
SURROGATES = "\ud800"
WHOLE = 2.0**53
LEAST, MOST = 1e-4, 1e16  # between them repr() needs no exponent


class _Beyond(Exception):
    """Not a case for the fast way."""


def canonical(value: Any) -> bytes:
    """Canonical JSON of plain Python values. Raises ValueError for NaN and infinities."""
    try:
        return _fast(value)
    except (TypeError, ValueError, _Beyond):
        return rfc8785.dumps(value)


def _fast(value: Any) -> bytes:
    numbers = _Numbers()
    ready = numbers.replaced(value)
    text = json.dumps(ready, ensure_ascii=False, allow_nan=False, sort_keys=True, separators=(",", ":"))
    if numbers.marked:
        if text.count(OPEN) != numbers.marked or text.count(CLOSE) != numbers.marked:
            raise _Beyond
        text = text.replace(f'"{OPEN}', "").replace(f'{CLOSE}"', "")
    if not text.isascii() and max(text) >= SURROGATES:
        raise _Beyond
    return text.encode()


class _Numbers:
    """Replaces the numbers of a document that Python writes differently."""

    def __init__(self) -> None:
        self.marked = 0

    def replaced(self, item: Any) -> Any:
        """The item with its numbers ready for the standard encoder."""
        kind = type(item)
        if kind is float:
            return self._number(item)
        if kind is dict:
            return {key: self.replaced(one) for key, one in item.items()}
        if kind is list or kind is tuple:
            return [self.replaced(one) for one in item]
        if kind is int and not -WHOLE < item < WHOLE:
            raise _Beyond
        return item

    def _number(self, number: float) -> Any:
        if LEAST <= number < MOST or -MOST < number <= -LEAST:
            return int(number) if number.is_integer() else number
        if number == 0:
            return 0
        self.marked += 1
        return f"{OPEN}{rfc8785.dumps(number).decode()}{CLOSE}"
