"""Whether a plan can be carried out on a dataset: said at submission, before anything is computed."""

from collections.abc import Iterator

from service.core.observations import Observations
from service.core.plan import Plan
from service.errors import FieldError, InvalidInput


def check(observations: Observations, plan: Plan) -> None:
    """Raise InvalidInput with every reason why `plan` cannot run on `observations`.

    Pointers start with /dataset or /plan.
    """
    bad = [
        *_degrees(observations, plan),
        *_weights(observations, plan),
        *_range(observations, plan),
        *_series(observations, plan),
    ]
    if bad:
        raise InvalidInput(bad)


def _degrees(o: Observations, plan: Plan) -> Iterator[FieldError]:
    needed = plan.min_degree + 1 if plan.intercept else plan.min_degree
    distinct = o.levels if plan.intercept else o.levels - int((o.level_x == 0).any())
    if o.levels == 1:
        yield FieldError("/dataset/x", "all values are equal: no curve can be fitted")
    elif distinct < needed:
        kind = "distinct values" if plan.intercept else "distinct values other than 0"
        message = f"needs at least {needed} {kind} for min_degree {plan.min_degree}, has {distinct}"
        yield FieldError("/dataset/x", message)
    elif o.n < needed + 1:
        message = f"needs at least {needed + 1} points for min_degree {plan.min_degree}, has {o.n}"
        yield FieldError("/dataset/x", message)


def _weights(o: Observations, plan: Plan) -> Iterator[FieldError]:
    if plan.weights in ("1/x", "1/x^2") and (o.x == 0).any():
        first = int((o.x == 0).argmax())
        yield FieldError(f"/dataset/x/{first}", f'is 0, where the weights "{plan.weights}" have no value')
    if plan.weights == "u_y" and o.u_y is None:
        yield FieldError("/plan/weights", 'is "u_y", but the dataset gives no u_y')
    elif plan.known_uncertainty and o.u_y is None:
        yield FieldError("/plan/known_uncertainty", "needs u_y in the dataset")
    if o.u_x is not None and o.u_y is None:
        yield FieldError("/dataset/u_x", "needs u_y as well: a point is adjusted by the ratio of both")


def _range(o: Observations, plan: Plan) -> Iterator[FieldError]:
    if plan.working_range is None:
        return
    lo, hi = plan.working_range
    if not ((o.x >= lo) & (o.x <= hi)).any():
        message = f"holds no data: x runs from {o.x.min():g} to {o.x.max():g}"
        yield FieldError("/plan/working_range", message)
    elif min(hi, float(o.x.max())) <= max(lo, float(o.x.min())):
        yield FieldError("/plan/working_range", "shares no more than one value of x with the data")


def _series(o: Observations, plan: Plan) -> Iterator[FieldError]:
    if plan.resampling.scheme == "leave_series_out" and len(set(o.series or ())) < 2:
        message = "is leave_series_out, but the dataset names fewer than 2 series"
        yield FieldError("/plan/resampling/scheme", message)
