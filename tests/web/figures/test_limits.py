"""The figure of the unseen bend where what is permitted is near it, far from it, or both along x."""

from dataclasses import dataclass, replace
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg

from service.core.plan import MaxPermissibleError, Plan, Requirements
from service.web.figures.data import FigureData
from service.web.figures.fit import unseen
from service.web.figures.style import STYLE
from tests.web.figures.made import UNITS, figures_of

X = np.concatenate([np.linspace(0.0, 500.0, 11), np.linspace(500.0, 0.0, 11)])
Y = 4 + 0.032 * X + np.random.default_rng(5).normal(0, 0.0008, X.size)  # unseen bend 0.001 mA
SPAN = MaxPermissibleError(value=0.1, of="y", kind="percent_of_span")


@dataclass(frozen=True)
class Shown:
    """Boxes in pixels, after layout, and what the legend names."""

    panel: Any
    figure: Any
    words: str
    words_box: Any
    legend: list[str]
    visible: set[str]


def shown(data: FigureData) -> Shown:
    with mpl.rc_context(STYLE):
        figure = unseen(data)
        canvas = FigureCanvasAgg(figure)
        canvas.draw()
        [panel] = figure.axes
        low, high = panel.get_ylim()
        said = [text for text in panel.texts if text.get_gid() == "limits-outside"]
        lines = [line for line in panel.get_lines() if not str(line.get_label()).startswith("_")]
        inside = {str(line.get_label()) for line in lines if (np.abs(line.get_ydata()) <= min(-low, high)).any()}
        return Shown(
            panel=panel.get_window_extent(),
            figure=figure.bbox,
            words=said[0].get_text() if said else "",
            words_box=said[0].get_window_extent() if said else None,
            legend=[text.get_text() for text in figure.legends[0].get_texts()],
            visible=inside | {"could hide at x"},
        )


def data(mpe: MaxPermissibleError | None = None, bend: float | None = None, **units: str) -> FigureData:
    asked = Requirements(max_permissible_error=mpe, max_unseen_bend=bend)
    return figures_of(X, Y, plan=Plan(requirements=asked), **{**UNITS, **units})


CASES: dict[str, FigureData] = {
    "pressure plan of the README": data(SPAN, 0.008),
    "error far outside": data(MaxPermissibleError(value=0.2)),
    "error varies, far outside": data(MaxPermissibleError(value=1, kind="percent_of_value"), 0.003),
    "long unit": data(MaxPermissibleError(value=12345.678, kind="percent_of_value"), 1.2345e-3, y_unit="W" * 200),
    "both near": data(MaxPermissibleError(value=0.003), 0.002),
    "leaves the panel": data(MaxPermissibleError(value=1, of="x", kind="percent_of_value")),
    "nothing asked": data(),
}


@pytest.mark.parametrize("case", CASES)
def test_words_fit_the_panel_keeps_its_size_and_the_legend_names_what_is_seen(case: str):
    found = shown(CASES[case])
    assert found.panel.width > 0.7 * found.figure.width
    assert set(found.legend) == found.visible
    if found.words:
        assert found.panel.x0 <= found.words_box.x0
        assert found.words_box.x1 <= found.panel.x1
        assert found.words_box.y1 <= found.panel.y1


@pytest.mark.parametrize("case", ["pressure plan of the README", "error far outside"])
def test_words_stand_above_the_bend(case: str):
    data, found = CASES[case], shown(CASES[case])
    with mpl.rc_context(STYLE):
        [panel] = unseen(data).axes
        low, high = panel.get_ylim()
    top_of_bend = found.panel.y0 + (data.result["unseen_bend"]["y"] - low) / (high - low) * found.panel.height
    assert found.words_box.y0 > top_of_bend


def test_what_is_said_of_limits_outside():
    assert shown(CASES["pressure plan of the README"]).words == (
        "max. permissible error:\n0.016 mA, beyond this axis\nlargest bend allowed:\n0.008 mA, beyond this axis"
    )
    varies = shown(CASES["error varies, far outside"])
    assert varies.words == "max. permissible error:\n0.04 mA or more, beyond this axis"
    assert "largest bend allowed" in varies.legend
    assert shown(CASES["both near"]).words == shown(CASES["nothing asked"]).words == ""


def test_a_bend_of_nothing_still_has_a_panel():
    exact = CASES["error far outside"]
    none = replace(exact, result={**exact.result, "unseen_bend": {**exact.result["unseen_bend"], "y": 0.0}})
    assert shown(none).words == "max. permissible error:\n0.2 mA, beyond this axis"
