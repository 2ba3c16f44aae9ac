"""The plan as posted: the core's plan, field by field, with its defaults."""

import json
from dataclasses import fields
from datetime import datetime
from typing import Annotated, Any, Literal, TypeVar

from pydantic import Field

from service.core.plan import (
    BackCalculated,
    MaxPermissibleError,
    Plan,
    Requirements,
    Resampling,
    Rule,
    Scheme,
    Weights,
)
from service.errors import FieldError, InvalidInput
from service.store.clock import rfc3339
from service.store.named_plans import NamedPlan
from service.web.schemas.common import WHOLE, Answer, Body, Finite, Label, Whole

T = TypeVar("T")


class ResamplingBody(Body):
    """How the data are split for cross-validation. Every scheme is exact."""

    scheme: Scheme = Field("k_fold", description="Leave out folds of points, single points, levels or series.")
    folds: Whole = Field(10, ge=2, le=1000, description="For k_fold; with as many as points: leave-one-out.")
    repeats: Whole = Field(10, ge=1, le=1000, description="For k_fold: how often the points are dealt anew.")
    seed: Whole = Field(0, ge=0, lt=2**32, description="For k_fold: random_state of scikit-learn's RepeatedKFold.")


class MaxPermissibleErrorBody(Body):
    """Maximum permissible error (VIM 4.26)."""

    value: Finite = Field(gt=0)
    of: Literal["x", "y"] = Field("y", description="Of the reading y, or of the quantity x found from it.")
    kind: Literal["absolute", "percent_of_value", "percent_of_span"] = "absolute"


class BackCalculatedBody(Body):
    """Back-calculated x within a limit of its nominal value."""

    limit_percent: Finite = Field(gt=0)
    limit_percent_lowest: Finite | None = Field(None, gt=0, description="Wider limit at the lowest non-zero level.")
    min_share: Finite = Field(1.0, gt=0, le=1, description="Least share of the points that must be within it.")


class RequirementsBody(Body):
    """What the calibration must satisfy; null asks nothing."""

    max_permissible_error: MaxPermissibleErrorBody | None = None
    monotonic: bool = Field(True, description="One reading must mean one value, all over the working range.")
    min_levels: Annotated[int, Field(ge=2, le=1_000_000), WHOLE] | None = None
    min_r2: Finite | None = Field(None, ge=0, le=1)
    back_calculated: BackCalculatedBody | None = None
    max_unseen_bend: Finite | None = Field(None, gt=0, description="In `y_unit`.")


class PlanBody(Body):
    """What to try and what must hold. Every key is optional."""

    min_degree: Whole = Field(1, ge=0, le=12)
    max_degree: Whole = Field(6, ge=0, le=12)
    intercept: bool = Field(True, description="False: the curve goes through the origin.")
    weights: Weights = "auto"
    rule: Rule = "least_bend"
    resampling: ResamplingBody = Field(default_factory=lambda: ResamplingBody())
    working_range: Annotated[list[Finite], Field(min_length=2, max_length=2)] | None = Field(
        None, description="[low, high] in `x_unit`; null: the range of the data."
    )
    confidence: Finite = Field(
        0.95,
        ge=0.5,
        lt=1,
        description="Of coverage intervals, and of the bound on the unseen bend: there at least 0.95.",
    )
    known_uncertainty: bool = Field(False, description="Take u_y as absolute: z-tests instead of F-tests.")
    requirements: RequirementsBody = Field(default_factory=lambda: RequirementsBody())

    def plan(self, place: str) -> Plan:
        """The core's plan. Raises InvalidInput with pointers below `place`."""
        asked = self.requirements
        try:
            return Plan(
                **_own(self, Plan, "resampling", "requirements", "working_range"),
                resampling=Resampling(**_own(self.resampling, Resampling)),
                working_range=None if self.working_range is None else (self.working_range[0], self.working_range[1]),
                requirements=Requirements(
                    **_own(asked, Requirements, "max_permissible_error", "back_calculated"),
                    max_permissible_error=_made(MaxPermissibleError, asked.max_permissible_error),
                    back_calculated=_made(BackCalculated, asked.back_calculated),
                ),
            )
        except InvalidInput as error:
            raise InvalidInput([FieldError(place + one.pointer, one.message) for one in error.errors]) from error


class NamedPlanBody(Body):
    """A plan to be kept under a name."""

    name: Label
    plan: PlanBody


class NamedPlanView(Answer):
    """One version of a named plan."""

    id: str = Field(description="Names this version: `plan_id` of jobs and batches.")
    name: str
    version: int
    plan_digest: str
    created_by: str
    created_at: datetime
    plan: Plan = Field(description="The whole plan, defaults included.")


def named_plan_document(plan: NamedPlan) -> bytes:
    """The JSON of NamedPlanView; the plan as it is stored."""
    head = {
        "id": plan.id,
        "name": plan.name,
        "version": plan.version,
        "plan_digest": plan.plan_digest,
        "created_by": plan.created_by,
        "created_at": rfc3339(plan.created_at),
    }
    return f'{json.dumps(head, ensure_ascii=False)[:-1]},"plan":{plan.document}}}'.encode()


def _own(body: Body, kind: type[Any], *but: str) -> dict[str, Any]:
    return {one.name: getattr(body, one.name) for one in fields(kind) if one.name not in but}


def _made(kind: type[T], body: Body | None) -> T | None:
    return None if body is None else kind(**_own(body, kind))
