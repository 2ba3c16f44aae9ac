"""Small calibrations that the tests of the core share."""

import numpy as np
import numpy.typing as npt

from service.core.analysis import analyse
from service.core.observations import Observations, observe
from service.core.plan import Plan
from service.core.result import Result, Warning

Floats = npt.NDArray[np.float64]


def noise(n: int, seed: int = 0) -> Floats:
    """Normal errors of standard deviation 1."""
    return np.random.default_rng(seed).normal(size=n)


def calibration(
    levels: int = 12, repeats: int = 1, *, bend: float = 0.0, sd: float = 0.05, seed: int = 0, lo: float = 1.0
) -> tuple[Floats, Floats]:
    """x over nine units from `lo`, y = 2 + 3 x + bend x^2 and normal errors, in random order."""
    x = np.repeat(np.linspace(lo, lo + 9, levels), repeats)
    x = np.random.default_rng(seed + 1000).permutation(x)
    return x, 2 + 3 * x + bend * x * x + sd * noise(x.size, seed)


def run(x: Floats, y: Floats, plan: Plan | None = None, **given: object) -> Result:
    """Analyse under `plan`; `given` goes to `observe`."""
    return analyse(observed(x, y, **given), plan or Plan())


def observed(x: Floats, y: Floats, **given: object) -> Observations:
    return observe(x, y, **given)  # type: ignore[arg-type]


def warning(found: Result, code: str) -> Warning | None:
    """The warning of that code, None where it was not raised."""
    return next((w for w in found.warnings if w.code == code), None)


def fixed(degree: int, **more: object) -> Plan:
    """A plan of one degree and equal weights unless said otherwise."""
    return Plan(**({"min_degree": degree, "max_degree": degree, "weights": "equal"} | more))  # type: ignore[arg-type]


def close(found: float | None, wanted: float, relative: float = 1e-9, absolute: float = 0.0) -> bool:
    return found is not None and abs(found - wanted) <= max(absolute, relative * max(abs(found), abs(wanted)))
