"""Paper, fonts and styles of the report. The fonts are those that matplotlib ships, embedded as subsets."""

from pathlib import Path
from typing import Any

import matplotlib as mpl
from reportlab.lib.colors import HexColor
from reportlab.lib.enums import TA_RIGHT
from reportlab.lib.pagesizes import A4
from reportlab.lib.styles import ParagraphStyle
from reportlab.lib.units import mm
from reportlab.pdfbase import pdfmetrics
from reportlab.pdfbase.ttfonts import TTFont

PAPER = A4
MARGIN = 14 * mm
GAP = 4 * mm
PADDING = 6  # points, that the layout engine keeps inside its frame
WIDTH = A4[0] - 2 * MARGIN - 2 * PADDING
INK, QUIET, RULE, WASH = HexColor("#1d2733"), HexColor("#515c68"), HexColor("#c9c6bc"), HexColor("#eef3f3")
VERDICTS = {
    "adequate": HexColor("#1f6135"),
    "conditional": HexColor("#7a4d00"),
    "inadequate": HexColor("#9b2c1a"),
    "undecided": HexColor("#51407e"),
}
BODY, BOLD, MONO = "LeastbendBody", "LeastbendBold", "LeastbendMono"
FILES = {BODY: "DejaVuSans.ttf", BOLD: "DejaVuSans-Bold.ttf", MONO: "DejaVuSansMono.ttf"}


def register_fonts() -> None:
    """Once a process."""
    folder = Path(mpl.get_data_path()) / "fonts" / "ttf"
    for name, file in FILES.items():
        if name not in pdfmetrics.getRegisteredFontNames():
            pdfmetrics.registerFont(TTFont(name, str(folder / file)))


def styles() -> dict[str, Any]:
    """Paragraph styles by name."""

    def style(
        name: str, size: float, *, font: str = BODY, color: Any = INK, before: float = 0, after: float = 2
    ) -> Any:
        return ParagraphStyle(
            name,
            fontName=font,
            fontSize=size,
            leading=size * 1.3,
            textColor=color,
            spaceBefore=before,
            spaceAfter=after,
            splitLongWords=True,
        )

    found = [
        style("title", 14, font=BOLD, after=1),
        style("under", 7.8, color=QUIET, after=4),
        style("verdict", 12, font=BOLD, after=2),
        style("body", 8, after=2),
        style("head", 9.5, font=BOLD, before=5, after=2),
        style("cell", 6.9, after=0),
        style("cell-right", 6.9, after=0),
        style("head-cell", 6.9, font=BOLD, after=0),
        style("head-cell-right", 6.9, font=BOLD, after=0),
        style("mono", 6.4, font=MONO, after=0),
        style("caution", 7, color=QUIET, after=0.5),
    ]
    by_name = {one.name: one for one in found}
    for name in ("cell-right", "head-cell-right"):
        by_name[name].alignment = TA_RIGHT
    return by_name
