"""From data to the bytes of an SVG or PNG: the only door to matplotlib.

Text that callers gave is drawn as outlines and escaped in `title` and `desc`; there is no script, no address and no
date in an SVG, and the same data give the same bytes.
"""

import warnings
from collections.abc import Callable
from io import BytesIO
from xml.sax.saxutils import escape

import matplotlib as mpl
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure

from service.web.figures.choice import degrees
from service.web.figures.data import FigureData
from service.web.figures.fit import curve, residuals, unseen
from service.web.figures.names import TITLES, FigureFormat, FigureName
from service.web.figures.standardised import leverage, normal, spread
from service.web.figures.style import STYLE
from service.web.figures.words import alt_text

DRAWINGS: dict[FigureName, Callable[[FigureData], Figure]] = {
    "curve": curve,
    "degrees": degrees,
    "residuals": residuals,
    "normal": normal,
    "spread": spread,
    "leverage": leverage,
    "unseen": unseen,
}
NO_METADATA = {"Date": None, "Creator": None, "Format": None, "Type": None}


def draw(name: FigureName, kind: FigureFormat, data: FigureData) -> bytes:
    """One figure. Not for two threads at once: matplotlib keeps its settings and fonts in the process."""
    with mpl.rc_context(STYLE), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph", category=UserWarning)  # a box in place of the character
        figure = DRAWINGS[name](data)
        out = BytesIO()
        if kind == "png":
            FigureCanvasAgg(figure)
            figure.savefig(out, format="png", metadata={"Software": None})
            return out.getvalue()
        FigureCanvasSVG(figure)
        figure.savefig(out, format="svg", metadata=NO_METADATA)
    return _with_words(out.getvalue().decode(), TITLES[name], alt_text(name, data)).encode()


def _with_words(svg: str, title: str, description: str) -> str:
    start = svg.index("<svg")
    head, rest = svg[start:].split(">", 1)
    words = f'<title id="title">{escape(title)}</title>\n <desc id="desc">{escape(description)}</desc>'
    return f'<?xml version="1.0" encoding="utf-8"?>\n{head} role="img" aria-labelledby="title desc">\n {words}{rest}'
