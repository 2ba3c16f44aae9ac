"""What every part of the report is written with: text, numbers of the API's document, tables, in one look."""

from typing import Any
from xml.sax.saxutils import escape

from reportlab.platypus import Paragraph, Table

from service.web.pages.gather import JobPage
from service.web.pages.numbers import at, shown
from service.web.report import look

Story = list[Any]


class Writer:
    """Makes flowables of one job's page."""

    def __init__(self, page: JobPage) -> None:
        self.page = page
        self.styles = look.styles()

    def text(self, words_: str, style: str = "body") -> Any:
        """A paragraph; whatever came from callers is escaped."""
        return Paragraph(escape(words_), self.styles[style])

    def number(self, pointer: str, digits: int | None = 4) -> str:
        """A number of the API's document, rounded for reading; None: with all its digits."""
        value = at(self.page.job, pointer)
        return "none" if value is None else shown(value, digits)

    def unit(self, axis: str) -> str:
        """The unit, with a space before it."""
        unit = self.page.dataset[f"{axis}_unit"]
        return f" {unit}" if unit else ""

    def table(self, head: list[str], rows: list[list[str]], shares: list[float], *, right: frozenset[int]) -> Any:
        """Cells of text; the columns in `right` hold numbers."""

        def cell(column: int, text: str, style: str) -> Any:
            return self.text(text, f"{style}-right" if column in right else style)

        whole = sum(shares)
        cells = [[cell(i, text, "head-cell") for i, text in enumerate(head)]]
        cells += [[cell(i, text, "cell") for i, text in enumerate(row)] for row in rows]
        return Table(
            cells,
            colWidths=[look.WIDTH * share / whole for share in shares],
            repeatRows=1,
            style=[
                ("LINEBELOW", (0, 0), (-1, 0), 0.8, look.QUIET),
                ("LINEBELOW", (0, 1), (-1, -1), 0.3, look.RULE),
                ("VALIGN", (0, 0), (-1, -1), "TOP"),
                ("LEFTPADDING", (0, 0), (-1, -1), 2),
                ("RIGHTPADDING", (0, 0), (-1, -1), 3),
                ("TOPPADDING", (0, 0), (-1, -1), 1),
                ("BOTTOMPADDING", (0, 0), (-1, -1), 1.5),
            ],
        )

    @property
    def signed(self) -> dict[str, Any]:
        """The verdict as it was issued."""
        assert self.page.verdict is not None
        return self.page.verdict


def moment(text: str) -> str:
    """An RFC 3339 time, to the second."""
    return f"{text[:10]} {text[11:19]} UTC"
