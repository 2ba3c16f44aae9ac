"""What is drawn, mapped back to data by the numbers beside the axes, against values found another way."""

from typing import Any

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from service.core.plan import Plan
from service.web.figures.draw import draw
from service.web.figures.standardised import COOK_CONTOURS
from service.web.figures.words import alt_text
from tests.web.figures.made import bowed, drawing, figures_of
from tests.web.figures.svg import Drawing

HREF = "{http://www.w3.org/1999/xlink}href"
NEAR = 2e-3  # of the axis: positions in the SVG have six decimals, tick labels three to four digits


def near(found: np.ndarray, expected: np.ndarray, *, scale: float | None = None) -> None:
    """Equal within what the labels of the axis can tell."""
    assert found.shape == expected.shape
    size = float(np.ptp(expected)) if scale is None else scale
    np.testing.assert_allclose(found, expected, rtol=0, atol=NEAR * size)


def fitted() -> Any:
    """The same fit by statsmodels."""
    data = bowed()
    return sm.OLS(data.y, np.vander(data.x, data.degree + 1, increasing=True)).fit()


@pytest.fixture(scope="module")
def influence() -> Any:
    """Residuals and leverages by statsmodels."""
    return fitted().get_influence()


def halves(values: np.ndarray) -> list[np.ndarray]:
    """By series: up, then down."""
    return [values[:11], values[11:]]


def test_the_case_is_what_it_is_meant_to_be():
    data = bowed()
    assert data.degree == 2
    assert data.suspects == (15,)


def test_curve_shows_every_reading_by_series():
    data, figure = bowed(), drawing("curve")
    for series, (x, y, left) in enumerate(zip(halves(data.x), halves(data.y), halves(fitted().resid), strict=True)):
        above, below = (_both(figure, f"points-{series}", part) for part in (0, 1))
        near(above[:, 0], x, scale=100)
        near(above[:, 1], y, scale=12)
        near(below[:, 0], x, scale=100)
        near(below[:, 1], left, scale=0.4)


def test_curve_line_and_band_are_those_of_statsmodels():
    figure, fit = drawing("curve"), fitted()
    line = figure.line("curve", x="zero")
    grid = np.vander(line[:, 0], 3, increasing=True)
    near(line[:, 1], fit.predict(grid), scale=12)
    half = _half(fit, line[:, 0])
    band = figure.band("residual-band")
    upper = band[band[:, 1] > 0]
    near(np.abs(upper[:, 1]), _half(fit, upper[:, 0]), scale=float(np.ptp(fit.resid)))
    assert band[:, 1].max() == pytest.approx(half.max(), rel=0.02)
    assert band[:, 1].min() == pytest.approx(-half.max(), rel=0.02)


def test_suspect_readings_are_ringed_and_numbered():
    data, figure = bowed(), drawing("curve")
    ring = _both(figure, "suspects", 0)
    near(ring, np.array([[data.x[15], data.y[15]]]), scale=100)
    assert {"16", "suspect"} <= set(figure.texts())
    assert not figure.has("swaying")


def test_a_point_that_only_sways_the_curve_is_in_a_square_and_not_called_suspect():
    x = np.append(np.linspace(0.0, 10.0, 11), 100.0)
    data = figures_of(x, 1 + 2 * x + 0.1 * np.cos(5 * x), plan=Plan(max_degree=2))
    assert (data.suspects, data.swaying) == ((), (11,))
    figure = Drawing(draw("curve", "svg", data))
    square = _both(figure, "swaying", 0)
    near(square, np.array([[x[11], data.y[11]]]), scale=200)
    assert {"12", "sways the curve"} <= set(figure.texts())
    assert not {"suspect"} & set(figure.texts())
    assert "In a square, swaying the curve: point 12." in alt_text("curve", data)
    assert "suspect" not in alt_text("leverage", data)


def test_residuals_stand_against_x_and_against_order():
    data, figure, left = bowed(), drawing("residuals"), fitted().resid
    order = np.arange(1.0, 23.0)
    for series in (0, 1):
        by_x, by_order = (_both(figure, f"points-{series}", part) for part in (0, 1))
        near(by_x[:, 0], halves(data.x)[series], scale=100)
        near(by_x[:, 1], halves(left)[series], scale=0.4)
        near(by_order[:, 0], halves(order)[series], scale=22)
        near(by_order[:, 1], halves(left)[series], scale=0.4)


def test_series_are_told_apart_by_shape():
    figure = drawing("residuals")
    up, down = (_outlines(figure, f"points-{series}") for series in (0, 1))
    assert len(up) == len(down) == 1
    assert up != down
    assert {"up", "down"} <= set(figure.texts())


def test_degrees_show_error_spread_and_every_choice():
    result, figure = bowed().result, drawing("degrees")
    errors = figure.markers("errors", x="rules")
    near(errors[:, 0], np.array([c["degree"] for c in result["candidates"]], dtype=float), scale=6)
    means = np.array([c["cv"]["rmse_mean"] for c in result["candidates"]])
    np.testing.assert_allclose(errors[:, 1], means, rtol=0.02)
    near(figure.markers("chosen", x="rules")[:, 0], np.array([2.0]), scale=6)
    near(_rules(figure), np.array([r["degree"] for r in result["decision"]["rules"]], dtype=float), scale=6)
    assert len(_paths(figure, "spread")) == len(means)


def test_normal_stands_against_t_quantiles_with_the_beta_band(influence):
    figure, df = drawing("normal"), fitted().df_resid
    t = influence.resid_studentized_external
    shown = np.concatenate([figure.markers(f"points-{k}") for k in (0, 1)])
    ordered = shown[np.argsort(shown[:, 1])]
    rank = np.arange(1, 23)
    near(ordered[:, 1], np.sort(t), scale=float(np.ptp(t)))
    near(ordered[:, 0], stats.t.ppf((rank - 0.375) / 22.25, df - 1), scale=5)
    band = figure.band("band")
    highest = stats.t.ppf(stats.beta.ppf(0.975, 22, 1), df - 1)
    assert band[:, 1].max() == pytest.approx(highest, rel=0.01)


def test_spread_is_the_root_of_the_standardised_residual(influence):
    data, figure = bowed(), drawing("spread")
    expected = np.sqrt(np.abs(influence.resid_studentized_internal))
    for series in (0, 1):
        shown = figure.markers(f"points-{series}")
        near(shown[:, 0], halves(fitted().fittedvalues)[series], scale=float(np.ptp(data.y)))
        near(shown[:, 1], halves(expected)[series], scale=float(expected.max()))


def test_leverage_and_its_lines_of_equal_distance(influence):
    figure, fit = drawing("leverage"), fitted()
    for series in (0, 1):
        shown = figure.markers(f"points-{series}")
        near(shown[:, 0], halves(influence.hat_matrix_diag)[series], scale=0.5)
        near(shown[:, 1], halves(influence.resid_studentized_external)[series], scale=15)
    for number, distance in enumerate(COOK_CONTOURS):
        line = figure.line(f"cook-{number}-high")
        line = line[np.isfinite(line[:, 1]) & (line[:, 1] < 8)]
        h, t = line[:, 0], line[:, 1]
        square = t**2 * fit.df_resid / (fit.df_resid - 1 + t**2)
        np.testing.assert_allclose(square * h / ((1 - h) * 3), distance, rtol=0.05)


def test_unseen_bend_is_the_envelope_of_the_bounded_terms():
    data, figure = bowed(), drawing("unseen")
    terms = data.result["unseen_bend"]["terms"]
    z = data.x / 50 - 1
    q, r = np.linalg.qr(np.vander(z, 6, increasing=True))
    at = np.linspace(-1, 1, 301)
    shapes = np.vander(at, 6, increasing=True) @ np.linalg.inv(r)
    assert q.shape == (22, 6)
    bounds = np.array([term["upper_bound"] for term in terms])
    for term, column in zip(terms, (3, 4, 5), strict=True):
        peak = np.abs(shapes[:, column]).max() * term["upper_bound"]
        assert peak == pytest.approx(term["largest_effect"], rel=1e-3)
    envelope = np.sqrt(((shapes[:, 3:] * bounds) ** 2).sum(axis=1))
    band = figure.band("bend")
    upper = band[band[:, 1] > 0]
    near(upper[:, 1], np.interp(upper[:, 0], at * 50 + 50, envelope), scale=float(envelope.max()) * 4)
    assert figure.line("largest-high")[:, 1] == pytest.approx(data.result["unseen_bend"]["y"], rel=0.02)
    assert figure.line("permitted-high")[:, 1] == pytest.approx(0.2, rel=0.01)
    assert figure.line("permitted-low")[:, 1] == pytest.approx(-0.2, rel=0.01)


def _half(fit: Any, x: np.ndarray) -> np.ndarray:
    interval = fit.get_prediction(np.vander(x, 3, increasing=True)).conf_int(alpha=0.05)
    return (interval[:, 1] - interval[:, 0]) / 2


def _both(figure, gid: str, part: int) -> np.ndarray:
    """An artist that stands in two panels: its data in the upper (0) or lower (1)."""
    groups = [g for g in figure.root.iter() if g.get("id") == gid]
    assert len(groups) == 2
    groups[1 - part].set("id", "set aside")
    shared = "zero" if figure.has("zero-by-order") is False and part == 0 else None
    try:
        return figure.markers(gid, x=shared)
    finally:
        groups[1 - part].set("id", gid)


def _outlines(figure, gid: str) -> set[str]:
    """Outlines of the markers of an artist, in whichever panel each is defined."""
    groups = [g for g in figure.root.iter() if g.get("id") == gid]
    named = {str(u.get(HREF))[1:] for g in groups for u in g.iter() if str(u.tag).endswith("use")}
    return {str(e.get("d")) for e in figure.root.iter() if e.get("id") in named}


def _paths(figure, gid: str) -> list[str]:
    return [str(e.get("d")) for e in figure.group(gid).iter() if str(e.tag).endswith("path") and e.get("d")]


def _rules(figure) -> np.ndarray:
    uses = [float(e.get("x")) for e in figure.group("rules").iter() if str(e.tag).endswith("use")]
    return figure.scale("rules", "xtick").data(np.array(uses))
