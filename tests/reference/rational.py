"""Least squares in rational arithmetic: what a fit to the data must give, whatever the way it is computed."""

from dataclasses import dataclass
from decimal import Decimal, localcontext
from fractions import Fraction


@dataclass(frozen=True)
class RationalFit:
    """Exact fit; standard deviations are rounded to 40 digits, since they are roots."""

    coefficients: list[Fraction]
    coefficient_sd: list[Decimal]
    residual_sd: Decimal
    rss: Fraction
    r_squared: Fraction
    f: Fraction | None


def fit(x: list[Fraction], y: list[Fraction], degree: int, *, intercept: bool = True) -> RationalFit:
    """Solve the normal equations by Gauss-Jordan elimination over the rationals."""
    powers = range(0 if intercept else 1, degree + 1)
    design = [[v**k for k in powers] for v in x]
    n, m = len(x), len(powers)
    work = [
        [sum((r[i] * r[j] for r in design), Fraction(0)) for j in range(m)]
        + [sum((r[i] * v for r, v in zip(design, y, strict=True)), Fraction(0))]
        + [Fraction(int(i == j)) for j in range(m)]
        for i in range(m)
    ]
    for c in range(m):
        pivot = work[c][c]  # positive: the matrix is positive definite
        work[c] = [v / pivot for v in work[c]]
        for r in range(m):
            if r != c:
                factor = work[r][c]
                work[r] = [u - factor * v for u, v in zip(work[r], work[c], strict=True)]
    b = [row[m] for row in work]
    residuals = [v - sum(c * a for c, a in zip(b, r, strict=True)) for r, v in zip(design, y, strict=True)]
    rss = sum((e * e for e in residuals), Fraction(0))
    mean = sum(y, Fraction(0)) / n if intercept else Fraction(0)
    tss = sum(((v - mean) ** 2 for v in y), Fraction(0))
    variance = rss / (n - m)
    explained_df = m - 1 if intercept else m
    return RationalFit(
        coefficients=b,
        coefficient_sd=[root(variance * work[i][m + 1 + i]) for i in range(m)],
        residual_sd=root(variance),
        rss=rss,
        r_squared=1 - rss / tss,
        f=(tss - rss) / explained_df / variance if rss else None,
    )


def root(value: Fraction) -> Decimal:
    with localcontext() as context:
        context.prec = 40
        return (Decimal(value.numerator) / Decimal(value.denominator)).sqrt()


def digits(found: float | Fraction | Decimal, reference: Fraction | Decimal | str) -> float:
    """Correct significant digits, at most 15; the absolute size counts where the reference is 0."""
    a, b = Fraction(found), Fraction(reference)
    if a == b:
        return 15.0
    off = abs(a - b) / abs(b) if b else abs(a)
    with localcontext() as context:
        context.prec = 20
        log = (Decimal(off.numerator) / Decimal(off.denominator)).log10()
    return float(max(Decimal(0), min(Decimal(15), -log)))
