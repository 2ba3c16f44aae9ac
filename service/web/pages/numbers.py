"""Numbers on pages: each is taken from the API's own document by its JSON pointer, and carries its exact value.

`<data value="0.0135032406" data-at="/result/candidates/1/cv/rmse_mean">0.0135</data>`
"""

import json
import math
from collections.abc import Sequence
from typing import Any

from markupsafe import Markup, escape

MINUS = "\N{MINUS SIGN}"


def at(document: Any, pointer: str) -> Any:
    """The value at an RFC 6901 pointer; the path is this program's own, so a missing one is an error."""
    value = document
    for part in pointer.split("/")[1:]:
        value = value[int(part)] if isinstance(value, Sequence) else value[part.replace("~1", "/").replace("~0", "~")]
    return value


def number(document: Any, pointer: str, digits: int | None = 4) -> Markup:
    """The number there, rounded for reading, or with all its digits; a word where it is null."""
    value = at(document, pointer)
    if value is None:
        return Markup('<span class="none" data-at="{}">{}</span>').format(pointer, "none")
    exact = json.dumps(value)
    return Markup('<data value="{}" data-at="{}">{}</data>').format(exact, pointer, shown(value, digits))


def shown(value: int | float, digits: int | None) -> str:
    """Rounded to so many digits; None for a number that people take into their own programs."""
    return unrounded(value) if digits is None else rounded(value, digits)


def unrounded(value: int | float) -> str:
    """The shortest text that reads back the same double, in the characters that programs read."""
    mantissa, e, power = repr(value).partition("e")
    mantissa = mantissa.removesuffix(".0")
    return f"{mantissa}e{int(power)}" if e else mantissa


def rounded(value: int | float, digits: int = 4) -> str:
    """So many significant digits; whole numbers whole."""
    if isinstance(value, int) or (value.is_integer() and abs(value) < 10**digits):
        text = str(int(value))
    else:
        text = f"{value:.{digits}g}"
        if "e" in text:
            mantissa, _, power = text.partition("e")
            text = f"{mantissa}e{int(power)}"
    return text.replace("-", MINUS)


def seconds(value: float | None) -> str:
    """A duration in words: the two largest units."""
    if value is None or not math.isfinite(value):
        return "none"
    if value < 1:
        return f"{value * 1000:.0f} ms"
    if value < 60:
        return f"{value:.1f} s"
    whole = int(value)
    for size, unit, less, below in ((86400, "d", 3600, "h"), (3600, "h", 60, "min"), (60, "min", 1, "s")):
        if whole >= size:
            return f"{whole // size} {unit} {whole % size // less} {below}"
    return f"{whole} s"


def moment(value: str | None) -> Markup:
    """An RFC 3339 time, to the second, in UTC."""
    if value is None:
        return Markup('<span class="none">not yet</span>')
    shown = f"{value[:10]} {value[11:19]}"
    return Markup('<time datetime="{}">{}</time>').format(value, escape(shown))
