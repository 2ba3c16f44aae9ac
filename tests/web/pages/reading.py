"""Reads pages as a test needs them: numbers with their places, links, forms, and anything that CSP would refuse."""

import html
import json
import re
from collections.abc import Iterator
from html.parser import HTMLParser
from typing import Any

from service.web.pages.numbers import MINUS, at

DATA = re.compile(r'<data value="([^"]*)" data-at="([^"]*)">([^<]*)</data>')
TOKEN = re.compile(r'name="form_token" value="([0-9a-f]{64})"')


def numbers(page: str) -> Iterator[tuple[str, Any, str]]:
    """Pointer, exact value and text of every number that says where it is from."""
    for value, pointer, text in DATA.findall(page):
        yield html.unescape(pointer), json.loads(html.unescape(value)), html.unescape(text)


def holds(page: str, document: Any, *, of: str = "") -> int:
    """Every number that `document` could hold equals what it holds there, exactly and as read; how many there were."""
    found = 0
    for pointer, value, text in numbers(page):
        if of and not pointer.startswith(of):
            continue
        assert value == at(document, pointer), pointer
        assert is_rounding(text, value), (pointer, text, value)
        found += 1
    return found


def is_rounding(text: str, value: float) -> bool:
    """Whether the text is the value, to as many digits as it shows."""
    plain = text.replace(MINUS, "-")
    if value == 0 or isinstance(value, int):
        return float(plain) == value
    mantissa, _, power = plain.partition("e")
    decimals = len(mantissa.partition(".")[2])
    half = 0.5000001 * 10.0 ** (int(power or 0) - decimals)
    whole_digits = "." not in mantissa and not power  # 12346 for 12345.6, or 5 digits of 123456.7: trailing zeros
    return abs(float(plain) - value) <= (abs(value) * 5e-4 if whole_digits else half)


class Refused(HTMLParser):
    """What a strict Content-Security-Policy would refuse, and images without words."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.found: list[str] = []
        self.feed(page)

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        """HTMLParser."""
        given = dict(attributes)
        if tag == "style" or (tag == "script" and not given.get("src")):
            self.found.append(f"inline {tag}")
        self.found += [f"{tag} {name}" for name in given if name == "style" or name.startswith("on")]
        for name in ("src", "href", "action"):
            value = given.get(name) or ""
            if value and not value.startswith(("/", "#")):
                self.found.append(f"{tag} {name}={value}")
        if tag == "img" and "alt" not in given:
            self.found.append("img without alt")


def form_token(page: str) -> str:
    """The token that the page's forms carry."""
    return TOKEN.findall(page)[0]
