"""Whether a plan can be carried out on a dataset: said at submission, before anything is computed."""

from service.core.observations import Observations
from service.core.plan import Plan
from service.errors import FieldError, InvalidInput


def check(observations: Observations, plan: Plan) -> None:
    """Raise InvalidInput with every reason why `plan` cannot run on `observations`.

    Pointers start with /dataset or /plan.
    """
    bad: list[FieldError] = []
    o = observations
    needed = plan.min_degree + 1 if plan.intercept else plan.min_degree
    distinct = o.levels if plan.intercept else o.levels - int((o.level_x == 0).any())
    if o.levels == 1:
        bad.append(FieldError("/dataset/x", "all values are equal: no curve can be fitted"))
    elif distinct < needed:
        kind = "distinct values" if plan.intercept else "distinct values other than 0"
        bad.append(
            FieldError("/dataset/x", f"needs at least {needed} {kind} for min_degree {plan.min_degree}, has {distinct}")
        )
    elif o.n < needed + 1:
        bad.append(
            FieldError("/dataset/x", f"needs at least {needed + 1} points for min_degree {plan.min_degree}, has {o.n}")
        )
    if plan.weights in ("1/x", "1/x^2") and (o.x == 0).any():
        first = int((o.x == 0).argmax())
        bad.append(FieldError(f"/dataset/x/{first}", f'is 0, where the weights "{plan.weights}" have no value'))
    if plan.weights == "u_y" and o.u_y is None:
        bad.append(FieldError("/plan/weights", 'is "u_y", but the dataset gives no u_y'))
    elif plan.known_uncertainty and o.u_y is None:
        bad.append(FieldError("/plan/known_uncertainty", "needs u_y in the dataset"))
    if o.u_x is not None and o.u_y is None:
        bad.append(FieldError("/dataset/u_x", "needs u_y as well: the effective variance is made of both"))
    if plan.working_range is not None:
        lo, hi = plan.working_range
        inside = int(((o.x >= lo) & (o.x <= hi)).sum())
        if inside == 0:
            bad.append(FieldError("/plan/working_range", f"holds no data: x runs from {o.x.min():g} to {o.x.max():g}"))
        elif min(hi, float(o.x.max())) <= max(lo, float(o.x.min())):
            bad.append(FieldError("/plan/working_range", "shares no more than one value of x with the data"))
    if plan.resampling.scheme == "leave_series_out" and len(set(o.series or ())) < 2:
        bad.append(
            FieldError("/plan/resampling/scheme", "is leave_series_out, but the dataset names fewer than 2 series")
        )
    if bad:
        raise InvalidInput(bad)
