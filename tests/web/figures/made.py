"""Figures of calibrations made for the tests."""

from functools import cache
from typing import Any

import numpy as np

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import MaxPermissibleError, Plan, Requirements
from service.store.codec import plan_document, result_document
from service.store.records import DatasetContent
from service.web.figures.data import FigureData, figure_data
from service.web.figures.draw import draw
from service.web.figures.names import FigureName
from tests.web.figures.svg import Drawing

UNITS = {"x_quantity": "pressure", "x_unit": "kPa", "y_quantity": "current", "y_unit": "mA"}


def figures_of(x: Any, y: Any, *, plan: Plan | None = None, subject: str = "gauge", **more: Any) -> FigureData:
    """Analyse and gather; `more`: columns of the dataset, and details."""
    columns = {name: more.pop(name, None) for name in ("u_x", "u_y", "series")}
    content = DatasetContent(
        subject=subject,
        x=np.asarray(x, dtype=np.float64),
        y=np.asarray(y, dtype=np.float64),
        details=more or UNITS,
        **columns,
    )
    observed = observe(content.x, content.y, **columns)
    asked = plan or Plan()
    result = analyse(observed, asked)
    return figure_data(
        content, subject=subject, plan=plan_document(asked).decode(), result=result_document(result).decode()
    )


@cache
def bowed() -> FigureData:
    """A quadratic calibration in two series, with one wild reading and an error permitted in y."""
    random = np.random.default_rng(7)
    x = np.tile(np.linspace(0.0, 100.0, 11), 2)
    y = 4.0 + 0.16 * x - 2e-4 * x**2 + random.normal(0.0, 0.02, x.size)
    y[15] += 0.3
    plan = Plan(requirements=Requirements(max_permissible_error=MaxPermissibleError(value=0.2, of="y")))
    return figures_of(x, y, plan=plan, series=("up",) * 11 + ("down",) * 11)


@cache
def drawing(name: FigureName) -> Drawing:
    """One figure of `bowed`."""
    return Drawing(draw(name, "svg", bowed()))
