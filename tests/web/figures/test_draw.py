"""Figures as files: safe, the same each time, legible, described in words; and data at the edges of what there is."""

import re
from typing import Any, get_args
from xml.etree import ElementTree as ET

import numpy as np
import pytest

from service.core.plan import MaxPermissibleError, Plan, Requirements
from service.web.figures.data import MOST_DRAWN, FigureData
from service.web.figures.draw import draw
from service.web.figures.names import TITLES, FigureName
from service.web.figures.words import alt_text
from tests.web.figures.made import bowed, figures_of
from tests.web.figures.svg import SVG, Drawing

NAMES: tuple[FigureName, ...] = get_args(FigureName)
LINE = np.linspace(0.0, 10.0, 12)
KNOWN_TAGS = {"svg", "title", "desc", "defs", "style", "g", "path", "use", "clipPath", "rect", "metadata"}
NARROW = 288.0  # pixels of a figure on a screen 320 px wide
LEAST_TEXT = 8.0


def noisy(n: int = 12, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).normal(0.0, 0.05, n)


@pytest.mark.parametrize("name", NAMES)
def test_same_data_same_bytes_and_nothing_active(name: FigureName):
    svg = draw(name, "svg", bowed())
    assert svg == draw(name, "svg", bowed())
    root = ET.fromstring(svg)
    assert {str(e.tag).removeprefix(SVG) for e in root.iter()} <= KNOWN_TAGS
    text = svg.decode()
    assert not re.search(r"<script|\son\w+=|javascript:|<image|<!DOCTYPE|dc:date", text)
    assert set(re.findall(r"https?://[^\s\"<]+", text)) <= {
        "http://www.w3.org/2000/svg",
        "http://www.w3.org/1999/xlink",
    }


@pytest.mark.parametrize("name", NAMES)
def test_words_stand_in_the_svg_and_text_is_legible_on_a_phone(name: FigureName):
    figure = Drawing(draw(name, "svg", bowed()))
    assert figure.root.get("role") == "img"
    assert next(figure.root.iter(f"{SVG}title")).text == TITLES[name]
    assert next(figure.root.iter(f"{SVG}desc")).text == alt_text(name, bowed())
    width = float(str(figure.root.get("viewBox")).split()[2])
    assert min(figure.text_sizes()) * NARROW / width >= LEAST_TEXT


@pytest.mark.parametrize("name", NAMES)
def test_png_is_one_and_wide_enough_for_print(name: FigureName):
    png = draw(name, "png", bowed())
    assert png.startswith(b"\x89PNG\r\n\x1a\n")
    assert int.from_bytes(png[16:20], "big") == 840
    assert png == draw(name, "png", bowed())


def test_words_say_the_numbers():
    data = bowed()
    result = data.result
    assert f"{result['candidates'][1]['cv']['rmse_mean']:.3g} at degree 2" in alt_text("degrees", data)
    assert f"{result['unseen_bend']['y']:.3g} mA" in alt_text("unseen", data)
    assert "maximum permissible error is 0.2 mA" in alt_text("unseen", data)
    assert "Ringed as suspect: point 16." in alt_text("curve", data)
    assert "95 % coverage band" in alt_text("curve", data)
    assert "told apart by shape: up, down" in alt_text("residuals", data)
    assert f"p {result['diagnostics']['normality']['p']:.2g}" in alt_text("normal", data)


HOSTILE = "<script>alert(1)</script> $x^2$ ]]> \" ' & -- \u202e\u0007 " + "W" * 120


@pytest.mark.parametrize("name", NAMES)
def test_hostile_labels_are_only_text(name: FigureName):
    x = np.tile(LINE, 2)
    details = {"x_quantity": HOSTILE, "x_unit": HOSTILE, "y_quantity": HOSTILE, "y_unit": "µ$\\frac{a"}
    data = figures_of(x, 2 * x + noisy(24), subject=HOSTILE, series=(HOSTILE,) * 12 + ("_b",) * 12, **details)
    svg = draw(name, "svg", data)
    root = ET.fromstring(svg)
    assert not [e for e in root.iter() if str(e.tag).endswith("script")]
    assert "\u202e" not in svg.decode()
    assert "\u0007" not in svg.decode()
    assert draw(name, "png", data)


def exact() -> FigureData:
    return figures_of(LINE, 1 + 2 * LINE)


def edges() -> dict[str, FigureData]:
    """Data at the edges of what is taken."""
    x, e = LINE, noisy()
    many = np.tile(np.linspace(1.0, 9.0, 9), 400)
    wild = 2 * many + np.random.default_rng(3).normal(0, 0.1, many.size)
    wild[1234] += 5.0
    mpe = MaxPermissibleError(value=1, of="x", kind="percent_of_value")
    return {
        "exact": exact(),
        "three points": figures_of([0.0, 1.0, 2.0], [0.0, 1.1, 1.9]),
        "constant y": figures_of(x, np.full(12, 3.0)),
        "weights 1/x^2": figures_of(x + 1, (x + 1) * (2 + e), plan=Plan(weights="1/x^2")),
        "u_y": figures_of(x, 2 * x + e, u_y=np.full(12, 0.05)),
        "known uncertainty": figures_of(x, 2 * x + e, u_y=np.full(12, 0.05), plan=Plan(known_uncertainty=True)),
        "u_x and u_y": figures_of(x, 2 * x + e, u_y=np.full(12, 0.05), u_x=np.full(12, 0.01)),
        "no intercept": figures_of(x + 1, 2 * (x + 1) + e, plan=Plan(intercept=False)),
        "degree 0": figures_of(x, 2 + e, plan=Plan(min_degree=0, max_degree=0)),
        "degree 12": figures_of(np.linspace(0, 1, 40), noisy(40), plan=Plan(min_degree=12, max_degree=12)),
        "far from 0": figures_of(1e8 + x, 1e-9 * (2 * x + e)),
        "many series": figures_of(np.tile(x, 4), np.tile(2 * x, 4) + noisy(48), series=tuple("abcdefghijklmnop") * 3),
        "range within": figures_of(
            x,
            2 * x + e,
            plan=Plan(
                working_range=(2.0, 8.0), requirements=Requirements(max_permissible_error=mpe, max_unseen_bend=5)
            ),
        ),
        "turns over": figures_of(x, (x - 5) ** 2 + e),
        "thousands": figures_of(many, wild),
    }


@pytest.fixture(scope="module")
def cases() -> dict[str, FigureData]:
    return edges()


@pytest.mark.parametrize("name", NAMES)
def test_every_figure_can_be_drawn_at_the_edges(name: FigureName, cases: dict[str, FigureData]):
    for case, data in cases.items():
        svg = draw(name, "svg", data).decode()
        assert "nan" not in re.sub(r"<(title|desc).*?</\1>", "", svg).lower(), case
        assert "nan" not in alt_text(name, data).split(), case


@pytest.mark.parametrize("name", ["normal", "spread", "leverage"])
def test_without_residuals_the_figure_says_so(name: FigureName, cases: dict[str, FigureData]):
    figure = Drawing(draw(name, "svg", cases["exact"]))
    assert not figure.has("points-0")
    assert any("no studentised residual" in text for text in figure.texts())
    assert alt_text(name, cases["exact"]).startswith("No ")


def test_of_thousands_of_points_the_ones_that_stand_out_are_drawn(cases: dict[str, FigureData]):
    data = cases["thousands"]
    assert data.result["diagnostics"]["points"] is None
    assert 1500 < data.drawn.size <= MOST_DRAWN
    assert 1234 in data.drawn
    assert len(draw("curve", "svg", data)) < 1_500_000


def test_columns_left_out_of_a_result_are_those_that_it_would_have_held(monkeypatch: pytest.MonkeyPatch):
    x, y = np.tile(LINE, 3) + 1, np.tile(2 * LINE, 3) + noisy(36)
    listed = figures_of(x, y, plan=Plan(weights="1/x"))
    monkeypatch.setattr("service.core.diagnose.MOST_POINTS_LISTED", 10)
    left_out = figures_of(x, y, plan=Plan(weights="1/x"))
    assert left_out.result["diagnostics"]["points"] is None
    for column in ("fitted", "residual", "leverage", "studentised", "cooks"):
        np.testing.assert_allclose(getattr(left_out, column), getattr(listed, column), rtol=1e-8, atol=1e-12)


@pytest.mark.parametrize(
    ("asked", "at_five"),
    [
        ({"value": 0.5, "of": "y", "kind": "absolute"}, 0.5),
        ({"value": 0.5, "of": "x", "kind": "absolute"}, 1.0),
        ({"value": 1.0, "of": "y", "kind": "percent_of_span"}, 0.2),
        ({"value": 1.0, "of": "x", "kind": "percent_of_span"}, 0.2),
        ({"value": 1.0, "of": "y", "kind": "percent_of_value"}, 0.11),
        ({"value": 1.0, "of": "x", "kind": "percent_of_value"}, 0.1),
    ],
)
def test_permitted_error_in_the_unit_of_y(asked: dict[str, Any], at_five: float):
    """On y = 1 + 2 x over 0 to 10."""
    plan = Plan(requirements=Requirements(max_permissible_error=MaxPermissibleError(**asked)))
    permitted = figures_of(LINE, 1 + 2 * LINE, plan=plan).permitted_at(np.array([5.0]))
    assert permitted is not None
    assert permitted[0] == pytest.approx(at_five, rel=1e-9)
