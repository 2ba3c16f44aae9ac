"""Walks a result: every number in it, with its path."""

import math
from collections.abc import Iterator
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np


def numbers(value: Any, path: str = "") -> Iterator[tuple[str, float]]:
    """Every number below `value`; raises TypeError for anything that is not plain Python."""
    if is_dataclass(value) and not isinstance(value, type):
        for field in fields(value):
            yield from numbers(getattr(value, field.name), f"{path}/{field.name}")
    elif isinstance(value, tuple):
        for i, item in enumerate(value):
            yield from numbers(item, f"{path}/{i}")
    elif isinstance(value, dict):
        for key, item in value.items():
            yield from numbers(item, f"{path}/{key}")
    elif isinstance(value, np.generic) or not isinstance(value, bool | int | float | str | None):
        raise TypeError(f"{path} holds a {type(value).__name__}")
    elif isinstance(value, int | float) and not isinstance(value, bool):
        yield path, float(value)


def all_finite(value: Any) -> None:
    """Fail, naming the place, where a number is NaN or infinite."""
    bad = [path for path, number in numbers(value) if not math.isfinite(number)]
    assert not bad, bad
