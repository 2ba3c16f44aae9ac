"""Everything a job computed, as frozen dataclasses of plain Python values (never NaN: None and a reason)."""

from dataclasses import dataclass
from typing import Any, Literal

Severity = Literal["note", "caution", "serious"]
Unit = Literal["x", "y", "percent", "share", "levels", "none"]
VerdictWord = Literal["adequate", "conditional", "inadequate", "undecided"]


@dataclass(frozen=True, kw_only=True, slots=True)
class Test:
    """A hypothesis test. `f` is the statistic (F, or a squared z where `df` has one entry)."""

    f: float | None
    df: tuple[int, ...]
    p: float | None
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Statistic:
    """A diagnostic statistic with its method; None and a reason where it cannot be computed."""

    statistic: float | None
    df: tuple[float, ...] | None
    p: float | None
    method: str
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class LeaveOneOut:
    """Exact leave-one-out: root mean square error in the unit of y (weighted mean), and R-squared."""

    rmse: float | None
    r2: float | None
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class CrossValidation:
    """Exact cross-validation under the plan's scheme.

    rmse over folds: mean and sample SD of each fold's root mean square error (unit of y);
    r2 over repeats. `folds_used` of `folds`: the folds in which the degree is estimable.
    """

    rmse_mean: float | None
    rmse_sd: float | None
    r2_mean: float | None
    r2_sd: float | None
    folds_used: int
    folds: int
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Candidate:
    """One degree tried. Weighted sums where the fit is weighted; residual_sd is of unit weight."""

    degree: int
    parameters: int
    rss: float | None
    residual_sd: float | None
    r2: float | None
    adj_r2: float | None
    aicc: float | None
    bic: float | None
    press: float | None
    loo: LeaveOneOut
    cv: CrossValidation
    step: Test
    lack_of_fit: Test | None
    max_abs_residual: float | None
    monotonic: bool | None
    estimable: bool
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class WeightModel:
    """One weighting compared: its restricted log-likelihood at the common degree."""

    weights: str
    picks_degree: int
    restricted_log_likelihood: float
    gain_over_equal: float


@dataclass(frozen=True, kw_only=True, slots=True)
class WeightChoice:
    """What was asked, what was used, and the comparison behind it (empty where none was needed)."""

    asked: str
    used: str
    common_degree: int | None
    compared: tuple[WeightModel, ...]
    why: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Step:
    """One step of the decision, in numbers and in words."""

    action: str
    from_degree: int
    to_degree: int
    term: int | None
    p: float | None
    threshold: float | None
    points: tuple[int, ...]
    words: str


@dataclass(frozen=True, kw_only=True, slots=True)
class RuleChoice:
    """What one rule chooses on these data; None and a reason where it cannot choose."""

    rule: str
    degree: int | None
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class DegreeShare:
    """How often a degree wins over the resamples."""

    degree: int
    share: float


@dataclass(frozen=True, kw_only=True, slots=True)
class Stability:
    """How often each degree is chosen when part of the data is left out."""

    resamples: int
    shares: tuple[DegreeShare, ...]
    chosen_share: float | None
    method: str
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Decision:
    """How the degree was chosen: the rule, its steps in order, and what every rule would choose."""

    rule: str
    steps: tuple[Step, ...]
    rules: tuple[RuleChoice, ...]
    stability: Stability
    size: float | None
    """Chance of any term too many when no further term exists and errors are normal."""


@dataclass(frozen=True, kw_only=True, slots=True)
class PowerBasis:
    """y = sum of coefficients[k] x^k. `digits`: correct significant digits of the worst coefficient.

    A coefficient is None only where no double can hold it (units too far from 1).
    """

    coefficients: tuple[float | None, ...]
    standard_errors: tuple[float | None, ...]
    t: tuple[float | None, ...]
    p: tuple[float | None, ...]
    digits: int
    method: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Curve:
    """The chosen curve: y = sum c_k T_k(t), t = (2x - lo - hi)/(hi - lo) with `domain` = [lo, hi]."""

    basis: Literal["chebyshev"]
    domain: tuple[float, float]
    coefficients: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...] | None
    power: PowerBasis
    residual_sd: float | None
    degrees_of_freedom: int
    r2: float | None
    f: Test


@dataclass(frozen=True, kw_only=True, slots=True)
class Points:
    """Per point, in the order measured. Residual = observed - fitted, unit of y; the rest unitless."""

    fitted: tuple[float, ...]
    residual: tuple[float, ...]
    leverage: tuple[float, ...]
    studentised: tuple[float | None, ...]
    cooks_distance: tuple[float | None, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Diagnostics:
    """What a statistician would check on the chosen fit."""

    breusch_pagan: Statistic
    durbin_watson_measured: Statistic
    durbin_watson_by_x: Statistic
    reset: Statistic
    normality: Statistic
    largest_studentised: Statistic
    largest_studentised_point: int | None
    next_terms: Statistic
    series: Statistic
    consistency: Statistic
    largest_gap_ratio: float | None
    """Square root of the largest prediction variance over the range to that of a single reading."""
    resolution: float | None
    """Step of the readings (unit of y), where they are visibly rounded."""
    points: Points | None
    points_reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class UnseenTerm:
    """One term above the chosen degree: upper bound on its coefficient, and its share of the bend."""

    degree: int
    coefficient: float
    standard_error: float
    upper_bound: float
    largest_effect: float


@dataclass(frozen=True, kw_only=True, slots=True)
class UnseenBend:
    """The largest error that a higher degree, too small for these data to show, could still cause."""

    y: float | None
    x: float | None
    in_single_readings: float | None
    """`y` divided by the standard deviation of one reading (at the largest variance)."""
    terms: tuple[UnseenTerm, ...]
    method: str
    reason: str | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Evidence:
    """The numbers behind a warning; `points` are indices in the order measured, from 0."""

    statistic: float | None = None
    value: float | None = None
    df: tuple[float, ...] | None = None
    p: float | None = None
    threshold: float | None = None
    points: tuple[int, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class Warning:
    """What the user of the instrument should know, and do next."""

    code: str
    severity: Severity
    message: str
    evidence: Evidence
    method: str


@dataclass(frozen=True, kw_only=True, slots=True)
class RequirementAnswer:
    """One requirement: what was asked, what was found, where it is worst, whether it is met.

    `met` is None where the data cannot tell; `message` then says why.
    """

    requirement: str
    asked: dict[str, Any]
    found: float | None
    unit: Unit
    worst_point: int | None
    worst_x: float | None
    met: bool | None
    message: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Reason:
    """One reason for the verdict."""

    code: str
    severity: Severity
    message: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Advice:
    """A design that would settle an `undecided`: computed, least readings first."""

    action: str
    added_readings: int
    at_x: tuple[float, ...]
    unseen_bend_expected: float | None
    message: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Judgement:
    """The verdict word with its reasons, and what would settle it where it is `undecided`."""

    verdict: VerdictWord
    reasons: tuple[Reason, ...]
    advice: tuple[Advice, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class FoldRecord:
    """How the folds were made, so that anyone can make them again; digest over the membership."""

    scheme: str
    folds: int
    repeats: int
    seed: int | None
    method: str
    digest: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Result:
    """Everything the core computed for one dataset under one plan."""

    points: int
    levels: int
    working_range: tuple[float, float]
    chosen_degree: int
    candidates: tuple[Candidate, ...]
    weights: WeightChoice
    decision: Decision
    curve: Curve
    diagnostics: Diagnostics
    unseen_bend: UnseenBend
    warnings: tuple[Warning, ...]
    requirements: tuple[RequirementAnswer, ...]
    verdict: Judgement
    resampling: FoldRecord
