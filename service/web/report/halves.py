"""Long narrow tables in two halves side by side, as wide as what stands in them, so that they take half the height."""

from collections.abc import Sequence
from typing import Any

from reportlab.pdfbase import pdfmetrics

from service.web.report import look
from service.web.report.writer import Writer

WHOLE_UP_TO = 4  # rows that are not worth halving
GAP = 14.0  # points
PADDING = 6.0
NARROWEST = 14.0
WIDEST = 200.0  # of one column; longer text is wrapped


def halved(writer: Writer, head: list[str], rows: list[list[str]], *, right: frozenset[int]) -> Any:
    """A table like that of the writer; in two halves where both fit."""
    widths = [_width(writer, [name, *(row[i] for row in rows)]) for i, name in enumerate(head)]
    if len(rows) <= WHOLE_UP_TO or 2 * sum(widths) + GAP > look.WIDTH:
        return writer.table(head, rows, widths, right=right)
    half = (len(rows) + 1) // 2
    beside = [*rows[half:], [""] * len(head)]
    cells = [[*row, "", *other] for row, other in zip(rows[:half], beside, strict=False)]
    room = (look.WIDTH - GAP) / (2 * sum(widths))
    shares = [width * room for width in widths]
    both = right | {len(head) + 1 + i for i in right}
    return writer.table([*head, "", *head], cells, [*shares, GAP, *shares], right=both)


def _width(writer: Writer, texts: Sequence[str]) -> float:
    """Of the widest text; the first is the head, in bold, which may be broken between words."""
    size, head = writer.styles["cell"].fontSize, texts[0].split()
    widths = [pdfmetrics.stringWidth(word, look.BOLD, size) for word in head]
    widths += [pdfmetrics.stringWidth(text, look.BODY, size) for text in texts[1:]]
    return float(min(WIDEST, PADDING + max(NARROWEST, *widths)))
