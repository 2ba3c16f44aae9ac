"""The levels at which a test becomes a note or a caution, and the shared way to say so."""

from service.core.result import Evidence, Severity, Statistic, Warning

CAUTION = 0.01
CAUTION_OF_TWO = 0.005  # where two tests look at the same thing
NOTE = 0.05


def severity_of(p: float | None, *, caution: float = CAUTION) -> Severity | None:
    """caution below its level, note below 5 % (scaled alike), else None."""
    if p is None:
        return None
    if p < caution:
        return "caution"
    return "note" if p < NOTE * caution / CAUTION else None


def from_test(
    code: str, test: Statistic, severity: Severity, message: str, *, threshold: float, points: tuple[int, ...] = ()
) -> Warning:
    """A warning whose evidence is one test."""
    evidence = Evidence(statistic=test.statistic, df=test.df, p=test.p, threshold=threshold, points=points)
    return Warning(code=code, severity=severity, message=message, evidence=evidence, method=test.method)
