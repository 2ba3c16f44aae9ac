"""From a job's page to the bytes of a PDF. The same verdict gives the same bytes."""

from io import BytesIO
from typing import Any

from reportlab.platypus import SimpleDocTemplate

from service.web.pages import words
from service.web.pages.gather import JobPage
from service.web.report import look
from service.web.report.story import Figures, Report

FOOT = 8.0  # points above the lower edge of the margin box


def report_pdf(page: JobPage, figures: Figures) -> bytes:
    """A4. Laid out twice, so that each page can say of how many it is. `page` must hold a verdict."""
    look.register_fonts()
    _, pages = _build(page, figures, pages=None)
    made, _ = _build(page, figures, pages=pages)
    return made


def _build(page: JobPage, figures: Figures, *, pages: int | None) -> tuple[bytes, int]:
    out, subject = BytesIO(), words.visible(page.job["subject"])
    document = SimpleDocTemplate(
        out,
        pagesize=look.PAPER,
        leftMargin=look.MARGIN,
        rightMargin=look.MARGIN,
        topMargin=look.MARGIN * 0.8,
        bottomMargin=look.MARGIN,
        title=f"Calibration curve of {subject}",
        subject=f"Verdict: {page.job['verdict']}",
        author="Leastbend",
        lang="en",
        invariant=1,
        pageCompression=1,
    )

    def foot(canvas: Any, _document: Any) -> None:
        number = canvas.getPageNumber()
        canvas.saveState()
        canvas.setFont(look.BODY, 6.5)
        canvas.setFillColor(look.QUIET)
        height = look.MARGIN - FOOT
        canvas.drawString(
            look.MARGIN + look.PADDING, height, f"Leastbend, result {page.job['result']['provenance']['result_digest']}"
        )
        of = "" if pages is None else f" of {pages}"
        canvas.drawRightString(look.PAPER[0] - look.MARGIN - look.PADDING, height, f"page {number}{of}")
        canvas.restoreState()

    document.build(Report(page, figures).story(), onFirstPage=foot, onLaterPages=foot)
    return out.getvalue(), int(document.page)
