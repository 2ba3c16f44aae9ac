"""The step in which readings come, read from their decimals."""

import math
from decimal import Decimal

from service.core.observations import Floats

MOST_DIGITS = 12  # readings with more significant digits than this are not visibly rounded
MOST_POINTS = 2000  # enough to see the step


def resolution(values: Floats) -> float | None:
    """Greatest decimal step of which all readings are multiples; None where none is visible.

    Common practice of the trade, no source. Needs three distinct readings.
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
    step = math.gcd(*(b - a for a, b in zip(whole, whole[1:], strict=False)))
    return float(Decimal(step).scaleb(least))
