"""The step in which readings come, read from their decimals."""

import math
from decimal import Decimal

from service.core.observations import Floats

MOST_DIGITS = 12  # readings with more significant digits than this are not visibly rounded
MANY = 6
MOST_POINTS = 2000  # enough to see the step


def resolution(values: Floats) -> float | None:
    """Greatest step of 1, 2 or 5 times a power of ten in which all readings differ; None where none is visible.

    Scale intervals come in these (common practice, no source). Needs three distinct readings; of fewer than six, whose
    differences may share a factor by chance, the last decimal counts.
    """
    texts: set[Decimal] = set()
    for value in values[:MOST_POINTS].tolist():
        text = Decimal(repr(value)).normalize()
        if len(text.as_tuple().digits) > MOST_DIGITS:
            return None
        texts.add(text)
    if len(texts) < 3:
        return None
    exponents = [int(t.as_tuple().exponent) for t in texts]
    least = min(exponents)
    if max(exponents) - least > 30:
        return None
    whole = sorted(int(t.scaleb(-least)) for t in texts)
    common = 1
    if len(whole) >= MANY:
        common = math.gcd(*(b - a for a, b in zip(whole, whole[1:], strict=False)))
    return float(Decimal(_scale_interval(common)).scaleb(least))


def _scale_interval(common: int) -> int:
    """The greatest of 1, 2, 5, 10, 20, ... that divides `common`."""
    power = 1
    while common % (10 * power) == 0:
        power *= 10
    return next(power * factor for factor in (5, 2, 1) if common % (power * factor) == 0)
