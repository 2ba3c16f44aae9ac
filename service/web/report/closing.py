"""The end of the report: digests, provenance, cautions, and a line to sign."""

from reportlab.lib.units import mm
from reportlab.platypus import KeepTogether, Table

from service.web.pages import words
from service.web.pages.numbers import at
from service.web.report import look
from service.web.report.writer import Story, Writer, moment


def provenance(writer: Writer) -> Story:
    """Digests to compare, and what computed them."""
    verdict, origin = writer.signed, at(writer.page.job, "/result/provenance")
    rows = [
        ("Dataset", verdict["dataset_digest"]),
        ("Plan", verdict["plan_digest"]),
        ("Result", verdict["result_digest"]),
        ("Verdict", str(writer.page.verdict_digest)),
        ("Verdict before", verdict["previous"] or "none: the first"),
    ]
    table = Table(
        [[writer.text(name, "cell"), writer.text(digest, "mono")] for name, digest in rows],
        colWidths=[look.WIDTH * 0.2, look.WIDTH * 0.8],
        style=[("TOPPADDING", (0, 0), (-1, -1), 0.5), ("BOTTOMPADDING", (0, 0), (-1, -1), 0.5)],
    )
    versions = ", ".join(f"{name} {version}" for name, version in origin["versions"].items())
    said = (
        f"Computed by {versions} on {origin['platform']}, worker {origin['worker']}, attempt {origin['attempt']}; "
        f"queued {moment(origin['queued_at'])}, finished {moment(origin['finished_at'])}; seed {origin['seed']}."
    )
    return [
        KeepTogether([writer.text("Digests (SHA-256) and provenance", "head"), table, writer.text(said, "caution")])
    ]


def cautions(writer: Writer) -> Story:
    """What the report does not replace, and a line to sign."""
    lines = [writer.text(line, "caution") for line in words.CAUTIONS]
    review = Table(
        [[writer.text("Reviewed by", "caution"), "", writer.text("Date", "caution"), ""]],
        colWidths=[look.WIDTH * share for share in (0.12, 0.48, 0.08, 0.32)],
        rowHeights=[9 * mm],
        style=[
            ("LINEBELOW", (1, 0), (1, 0), 0.5, look.QUIET),
            ("LINEBELOW", (3, 0), (3, 0), 0.5, look.QUIET),
            ("VALIGN", (0, 0), (-1, -1), "BOTTOM"),
            ("LEFTPADDING", (0, 0), (0, -1), 0),
        ],
    )
    return [KeepTogether([writer.text("Cautions", "head"), *lines, review])]
