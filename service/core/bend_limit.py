"""The unseen bend held against what the plan permits, point by point where that is a share of the value."""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev

from service.core.basis import grid_over
from service.core.curve import derivative, to_t
from service.core.findings import Findings
from service.core.nested import NestedFits
from service.core.observations import Floats
from service.core.plan import MaxPermissibleError
from service.core.requirements import allowed_error


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class BendLimit:
    """Allowed bend in the unit of y at some x; `pointwise` when it differs from place to place.

    A limit that is the same everywhere is held against the root of the summed squares of each
    term's peak (the published unseen bend); one that varies, against the bend's profile.
    """

    x: Floats
    allowed: Floats
    pointwise: bool
    words: str

    def ratio(self, fits: NestedFits, first_column: int, bounds: Floats) -> float:
        """Largest bend over what is allowed; above 1 the limit is broken."""
        shapes = fits.orthonormal_at(self.x)[:, first_column : first_column + bounds.size] * bounds
        if self.pointwise:
            return float(np.max(np.sqrt(np.sum(shapes**2, axis=1)) / self.allowed))
        peak = float(np.sqrt(np.sum(np.abs(shapes).max(axis=0) ** 2)))
        return peak / float(self.allowed.min())


def bend_limits(found: Findings) -> list[BendLimit]:
    """What the plan says about bend: the maximum permissible error, and `max_unseen_bend`."""
    asked = found.plan.requirements
    mpe = asked.max_permissible_error
    if mpe is None and asked.max_unseen_bend is None:
        return []
    grid = grid_over(found.working_range)
    limits: list[BendLimit] = []
    if mpe is not None and (mpe.of == "y" or found.monotonic):
        pointwise = mpe.kind == "percent_of_value"
        x = np.union1d(grid, found.observations.level_x) if pointwise else grid
        x = x[(x >= found.working_range[0]) & (x <= found.working_range[1])]
        allowed = allowed_error(mpe, found, x)
        if pointwise:
            x, allowed = _where_a_share_is_asked(found, mpe, x, allowed)
        if mpe.of == "x":
            slopes = np.full(x.shape, found.least_slope or 0.0)
            if pointwise:
                lo, hi = found.full.domain
                first = derivative(found.coefficients) * (2 / (hi - lo))
                slopes = np.abs(chebyshev.chebval(to_t(x, found.full.domain), first))
            allowed = allowed * slopes
        keep = np.isfinite(allowed) & (allowed > 0)
        if keep.any():
            words = "the maximum permissible error"
            limits.append(BendLimit(x=x[keep], allowed=allowed[keep], pointwise=pointwise, words=words))
    if asked.max_unseen_bend is not None:
        allowed = np.full(grid.shape, asked.max_unseen_bend)
        limits.append(BendLimit(x=grid, allowed=allowed, pointwise=False, words="the plan's max_unseen_bend"))
    return limits


def _where_a_share_is_asked(
    found: Findings, mpe: MaxPermissibleError, x: Floats, allowed: Floats
) -> tuple[Floats, Floats]:
    """Without the neighbourhood of 0, where a share of the value allows nothing: below what any level is allowed."""
    at_levels = allowed_error(mpe, found, found.observations.level_x)
    at_levels = at_levels[at_levels > 0]
    if at_levels.size == 0:
        return x, allowed
    keep = allowed >= at_levels.min()
    return x[keep], allowed[keep]
