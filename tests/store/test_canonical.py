"""Canonical JSON against the rfc8785 package and against the RFC's own examples of numbers (appendix B)."""

import math
import struct
from typing import Any

import pytest
import rfc8785
from hypothesis import given
from hypothesis import strategies as st

from service.store.canonical import canonical

APPENDIX_B = {
    "0000000000000000": "0",
    "8000000000000000": "0",
    "0000000000000001": "5e-324",
    "8000000000000001": "-5e-324",
    "7fefffffffffffff": "1.7976931348623157e+308",
    "ffefffffffffffff": "-1.7976931348623157e+308",
    "4340000000000000": "9007199254740992",
    "c340000000000000": "-9007199254740992",
    "4430000000000000": "295147905179352830000",
    "44b52d02c7e14af5": "9.999999999999997e+22",
    "44b52d02c7e14af6": "1e+23",
    "44b52d02c7e14af7": "1.0000000000000001e+23",
    "444b1ae4d6e2ef4e": "999999999999999700000",
    "444b1ae4d6e2ef4f": "999999999999999900000",
    "444b1ae4d6e2ef50": "1e+21",
    "3eb0c6f7a0b5ed8c": "9.999999999999997e-7",
    "3eb0c6f7a0b5ed8d": "0.000001",
    "41b3de4355555553": "333333333.3333332",
    "41b3de4355555557": "333333333.33333343",
    "becbf647612f3696": "-0.0000033333333333333333",
    "43143ff3c1cb0959": "1424953923781206.2",
}
NUMBERS = st.floats(allow_nan=False, allow_infinity=False) | st.integers(-(2**53) + 1, 2**53 - 1)
DOCUMENTS = st.recursive(
    st.none() | st.booleans() | NUMBERS | st.text(st.characters(exclude_categories=["Cs"])),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(st.characters(exclude_categories=["Cs"])), inner),
)


@pytest.mark.parametrize(("bits", "text"), APPENDIX_B.items())
def test_numbers_of_the_rfc(bits: str, text: str) -> None:
    (number,) = struct.unpack(">d", bytes.fromhex(bits))
    assert canonical(number).decode() == text
    assert canonical([number, f"{number}.0 1e-05"]).decode() == f'[{text},"{number}.0 1e-05"]'


@given(DOCUMENTS)
def test_it_is_what_the_package_writes(document: Any) -> None:
    assert canonical(document) == rfc8785.dumps(document)


@given(st.lists(NUMBERS))
def test_columns_of_numbers(column: list[float]) -> None:
    assert canonical({"x": column}) == rfc8785.dumps({"x": column})


@pytest.mark.parametrize("value", [math.nan, math.inf, [1.0, -math.inf]])
def test_what_is_no_number_is_refused(value: Any) -> None:
    with pytest.raises(ValueError, match="nan|inf|NaN"):
        canonical(value)


def test_an_integer_that_no_double_holds_is_refused() -> None:
    with pytest.raises(ValueError, match="9007199254740993"):
        canonical({"n": 2**53 + 1})
