"""The plan: what to try and what must hold. Immutable; every field has the documented default."""

from dataclasses import dataclass, field
from typing import Literal

from service.errors import FieldError, InvalidInput

Weights = Literal["auto", "equal", "1/x", "1/x^2", "u_y"]
Rule = Literal["least_bend", "lowest_cv", "one_standard_error", "aicc", "bic"]
Scheme = Literal["k_fold", "leave_one_out", "leave_level_out", "leave_series_out"]
RULES: tuple[Rule, ...] = ("least_bend", "lowest_cv", "one_standard_error", "aicc", "bic")
HIGHEST_DEGREE = 12
LEAST_BEND_CONFIDENCE = 0.95


@dataclass(frozen=True, kw_only=True, slots=True)
class Resampling:
    """How the data are split for cross-validation.

    `folds`, `repeats` and `seed` matter for `k_fold` only: scikit-learn's RepeatedKFold with
    `random_state=seed`. The other schemes leave out one point, one level or one series in turn.
    """

    scheme: Scheme = "k_fold"
    folds: int = 10
    repeats: int = 10
    seed: int = 0


@dataclass(frozen=True, kw_only=True, slots=True)
class MaxPermissibleError:
    """Maximum permissible error (VIM 4.26).

    `of` says whether the error is of the quantity x (what the instrument is used to find) or of
    the reading y; percentages are of the value at each point or of the span of the working range.
    """

    value: float
    of: Literal["x", "y"] = "y"
    kind: Literal["absolute", "percent_of_value", "percent_of_span"] = "absolute"


@dataclass(frozen=True, kw_only=True, slots=True)
class BackCalculated:
    """Back-calculated x within a limit of its nominal value, for a least share of the points.

    `limit_percent_lowest` is the wider limit at the lowest non-zero level (the form of the rule in
    ICH M10, Bioanalytical method validation, 2022); absent, the one limit holds everywhere.
    """

    limit_percent: float
    limit_percent_lowest: float | None = None
    min_share: float = 1.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Requirements:
    """What the calibration must satisfy; None asks nothing.

    `max_unseen_bend` is in the unit of y. `monotonic` is over the working range.
    """

    max_permissible_error: MaxPermissibleError | None = None
    monotonic: bool = True
    min_levels: int | None = None
    min_r2: float | None = None
    back_calculated: BackCalculated | None = None
    max_unseen_bend: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Plan:
    """What to try and what must hold.

    `working_range` is in the unit of x and defaults to the range of the data. `known_uncertainty`
    takes the dataset's u_y as absolute: terms are then judged by z-tests, not by F-tests. `confidence` is that of
    coverage intervals and of the bounds on terms too small to show, which are never less sure than 95 %.
    """

    min_degree: int = 1
    max_degree: int = 6
    intercept: bool = True
    weights: Weights = "auto"
    rule: Rule = "least_bend"
    resampling: Resampling = field(default_factory=Resampling)
    working_range: tuple[float, float] | None = None
    confidence: float = 0.95
    known_uncertainty: bool = False
    requirements: Requirements = field(default_factory=Requirements)

    @property
    def bend_confidence(self) -> float:
        """Of the unseen bend: what is asked for, and 95 % at least, so that asking for less cannot hide a bend."""
        return max(LEAST_BEND_CONFIDENCE, self.confidence)

    def __post_init__(self) -> None:
        """Check what one field alone cannot show; raises InvalidInput naming each field."""
        bad: list[FieldError] = []
        least = 0 if self.intercept else 1

        def check(good: bool, pointer: str, message: str) -> None:
            if not good:
                bad.append(FieldError(pointer, message))

        check(least <= self.min_degree <= HIGHEST_DEGREE, "/min_degree", f"must be from {least} to {HIGHEST_DEGREE}")
        check(
            self.min_degree <= self.max_degree <= HIGHEST_DEGREE,
            "/max_degree",
            f"must be from min_degree ({self.min_degree}) to {HIGHEST_DEGREE}",
        )
        check(0.5 <= self.confidence < 1, "/confidence", "must be at least 0.5 and less than 1")
        check(2 <= self.resampling.folds <= 1000, "/resampling/folds", "must be from 2 to 1000")
        check(1 <= self.resampling.repeats <= 1000, "/resampling/repeats", "must be from 1 to 1000")
        check(0 <= self.resampling.seed < 2**32, "/resampling/seed", "must be from 0 to 4294967295")
        if self.working_range is not None:
            check(self.working_range[0] < self.working_range[1], "/working_range", "must run from low to high")
        if self.known_uncertainty:
            check(
                self.weights in ("auto", "u_y"),
                "/known_uncertainty",
                'needs weights "auto" or "u_y", since the u_y of the dataset are taken as absolute',
            )
        bad.extend(_requirement_errors(self.requirements))
        if bad:
            raise InvalidInput(bad)


def _requirement_errors(asked: Requirements) -> list[FieldError]:
    bad: list[FieldError] = []
    at = "/requirements"
    mpe = asked.max_permissible_error
    if mpe is not None and not mpe.value > 0:
        bad.append(FieldError(f"{at}/max_permissible_error/value", "must be greater than 0"))
    if asked.min_levels is not None and asked.min_levels < 2:
        bad.append(FieldError(f"{at}/min_levels", "must be at least 2"))
    if asked.min_r2 is not None and not 0 <= asked.min_r2 <= 1:
        bad.append(FieldError(f"{at}/min_r2", "must be from 0 to 1"))
    if asked.max_unseen_bend is not None and not asked.max_unseen_bend > 0:
        bad.append(FieldError(f"{at}/max_unseen_bend", "must be greater than 0"))
    back = asked.back_calculated
    if back is not None:
        if not back.limit_percent > 0:
            bad.append(FieldError(f"{at}/back_calculated/limit_percent", "must be greater than 0"))
        lowest = back.limit_percent_lowest
        if lowest is not None and not lowest >= back.limit_percent:
            bad.append(FieldError(f"{at}/back_calculated/limit_percent_lowest", "must be at least limit_percent"))
        if not 0 < back.min_share <= 1:
            bad.append(FieldError(f"{at}/back_calculated/min_share", "must be greater than 0 and at most 1"))
    return bad
