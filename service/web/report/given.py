"""What the analysis was given: the plan line by line, and the readings beside what the chosen curve makes of them."""

from typing import Any

from reportlab.lib.units import mm
from reportlab.platypus import CondPageBreak, KeepTogether, Spacer, Table

from service.web.figures.style import shortened
from service.web.pages.numbers import at, shown
from service.web.pages.plan_lines import PlanLine
from service.web.pages.readings import Readings
from service.web.report import look
from service.web.report.halves import halved
from service.web.report.writer import Story, Writer

LONGEST_UNIT, LONGEST_LABEL = 12, 24  # in a narrow column
ROOM = 25 * mm  # for the heading and a few readings, else a new page


def plan(writer: Writer) -> Story:
    """Two lines of the plan beside each other."""
    lines = writer.page.plan
    half = (len(lines) + 1) // 2
    pairs = zip(lines[:half], [*lines[half:], None], strict=False)
    cells = [[*_line(writer, left), *_line(writer, right)] for left, right in pairs]
    table = Table(cells, colWidths=[look.WIDTH * share for share in (0.17, 0.3, 0.22, 0.31)], style=_tight())
    return [KeepTogether([writer.text("Plan", "head"), table])]


def _line(writer: Writer, line: PlanLine | None) -> list[Any]:
    if line is None:
        return ["", ""]
    said = [part if isinstance(part, str) else writer.number(part.pointer, None) for part in line.parts]
    return [writer.text(line.name, "head-cell"), writer.text("".join(said), "cell")]


def readings(writer: Writer) -> Story:
    """A table that may run over pages; its head is repeated."""
    found = writer.page.readings
    if found is None:
        return []
    head = ["No.", *(_headed(writer, column.name) for column in found.columns)]
    rows = [_row(found, index) for index in range(found.listed)]
    table = halved(writer, [*head, *_series(found, "series")], rows, right=frozenset(range(len(head))))
    note = [writer.text(found.note, "caution")] if found.note else []
    return [CondPageBreak(ROOM), writer.text("Readings", "head"), *note, table, Spacer(1, look.GAP)]


def _row(found: Readings, index: int) -> list[str]:
    cells = [shown(at(one.document, one.at(index)), one.digits) for one in found.columns]
    label = "" if found.series is None else shortened(found.series[index], LONGEST_LABEL)
    return [str(index + 1), *cells, *_series(found, label)]


def _series(found: Readings, text: str) -> list[str]:
    return [] if found.series is None else [text]


def _headed(writer: Writer, name: str) -> str:
    unit = writer.page.dataset["x_unit" if name in ("x", "u_x") else "y_unit"]
    return f"{name} ({shortened(unit, LONGEST_UNIT)})" if unit else name


def _tight() -> list[Any]:
    return [
        ("VALIGN", (0, 0), (-1, -1), "TOP"),
        ("LEFTPADDING", (0, 0), (-1, -1), 2),
        ("TOPPADDING", (0, 0), (-1, -1), 0.5),
        ("BOTTOMPADDING", (0, 0), (-1, -1), 0.5),
    ]
