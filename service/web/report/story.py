"""What the report says, in order, as flowables of reportlab's layout engine."""

from io import BytesIO
from typing import Any

from reportlab.lib.units import mm
from reportlab.platypus import CondPageBreak, Image, KeepTogether, Spacer, Table

from service.web.figures.names import TITLES, FigureName
from service.web.pages import words
from service.web.pages.gather import JobPage
from service.web.pages.numbers import at, rounded
from service.web.report import closing, given, look
from service.web.report.halves import halved
from service.web.report.writer import Story, Writer, moment

Figures = dict[FigureName, bytes]


class Report(Writer):
    """Writes the parts that go with the figures, and puts all parts in order."""

    def __init__(self, page: JobPage, figures: Figures) -> None:
        super().__init__(page)
        self.figures = figures

    def story(self) -> Story:
        """The whole report."""
        return [
            *self._top(),
            *self._verdict(),
            self._pair("curve", "degrees"),
            *self._curve(),
            *self._requirements(),
            *given.plan(self),
            *given.readings(self),
            CondPageBreak(90 * mm),
            self._pair("residuals", "unseen"),
            *self._unseen(),
            *self._candidates(),
            *self._warnings(),
            *self._checks(),
            *closing.provenance(self),
            *closing.cautions(self),
        ]

    def _top(self) -> Story:
        data, verdict = self.page.dataset, self.signed
        lo, hi = data["summary"]["x_range"]
        said = [f"{data['title']}. " if data["title"] else ""]
        said += [f"{data['summary']['points']} points at {data['summary']['levels']} levels, "]
        said += [f"{data['x_quantity'] or 'x'} from {rounded(lo, 7)} to {rounded(hi, 7)}{self.unit('x')}"]
        said += [f", measured {moment(data['measured_at'])}. " if data["measured_at"] else ". "]
        said += [f"Verdict issued {moment(verdict['issued_at'])} by Leastbend {verdict['service_version']}"]
        said += [f"; submitted by {self.page.job['submitted_by']}; job {self.page.job['id']}."]
        return [
            self.text(f"Calibration curve of {words.visible(verdict['subject'])}", "title"),
            self.text("".join(said), "under"),
        ]

    def _verdict(self) -> Story:
        verdict = self.signed
        word, colour = verdict["verdict"], look.VERDICTS[verdict["verdict"]]
        lines = [
            self.text(f"{word.capitalize()}: {words.degree_name(verdict['chosen_degree'])}", "verdict"),
            self.text(words.VERDICTS[word]),
            *(self.text(f"{one['severity'].capitalize()}: {one['message']}") for one in verdict["reasons"]),
            self.text(f"What to do: {words.NEXT[word]}"),
            *(self.text(f"Would settle it: {one['message']}") for one in at(self.page.job, "/result/verdict/advice")),
        ]
        style = [
            ("LINEBEFORE", (0, 0), (0, -1), 3, colour),
            ("LEFTPADDING", (0, 0), (-1, -1), 8),
            ("TOPPADDING", (0, 0), (-1, -1), 1),
            ("BOTTOMPADDING", (0, 0), (-1, -1), 1),
        ]
        return [Table([[line] for line in lines], colWidths=[look.WIDTH], style=style), Spacer(1, look.GAP)]

    def _pair(self, *names: FigureName) -> Any:
        width = (look.WIDTH - look.GAP) / 2
        pictures, captions = [], []
        for name in names:
            picture = Image(BytesIO(self.figures[name]))
            picture.drawHeight *= width / picture.drawWidth
            picture.drawWidth = width
            pictures.append(picture)
            captions.append(self.text(f"{TITLES[name]}. {words.FIGURES[name]}", "caution"))
        style = [
            ("VALIGN", (0, 0), (-1, -1), "TOP"),
            ("LEFTPADDING", (0, 0), (-1, -1), 0),
            ("RIGHTPADDING", (0, 0), (0, -1), look.GAP),
            ("RIGHTPADDING", (1, 0), (1, -1), 0),
            ("TOPPADDING", (0, 0), (-1, -1), 1),
        ]
        return KeepTogether([Table([pictures, captions], colWidths=[width + look.GAP, width], style=style)])

    def _curve(self) -> Story:
        power = at(self.page.job, "/result/curve/power/coefficients")
        rows = [
            [str(k), self.number(f"{where}/coefficients/{k}", None)]
            + [self.number(f"{where}/{column}/{k}", digits) for column, digits in COLUMNS]
            + [self.number(f"/result/curve/coefficients/{k}", None)]
            for where in ("/result/curve/power",)
            for k in range(len(power))
        ]
        head = ["Power of x", "Coefficient", "Standard error", "t", "p", "Chebyshev coefficient"]
        lo, hi = (self.number(f"/result/working_range/{end}", None) for end in (0, 1))
        said = (
            f"Valid for x from {lo} to {hi}{self.unit('x')} only. Chebyshev basis over"
            f" a = {self.number('/result/curve/domain/0', None)} to b = {self.number('/result/curve/domain/1', None)}:"
            f" {words.CHEBYSHEV}"
            f" Residual SD {self.number('/result/curve/residual_sd')}{self.unit('y')},"
            f" {self.number('/result/curve/degrees_of_freedom')} degrees of freedom,"
            f" R-squared {self.number('/result/curve/r2', 9)}. Weights: {self.page.job['result']['weights']['used']}."
        )
        table = self.table(head, rows, [1, 2.2, 1.6, 1.2, 1.2, 2.2], right=frozenset({1, 2, 3, 4, 5}))
        return [KeepTogether([self.text("Curve", "head"), table]), self.text(said)]

    def _requirements(self) -> Story:
        asked = at(self.page.job, "/result/requirements")
        if not asked:
            return [self.text("Requirements", "head"), self.text("The plan asks for nothing in particular.")]
        met = {True: "met", False: "not met", None: "not known"}
        rows = [[words.plain(one["requirement"]), met[one["met"]], one["message"]] for one in asked]
        table = self.table(["Requirement", "Met", "In words"], rows, [2, 1, 7], right=frozenset())
        return [KeepTogether([self.text("Requirements", "head"), table])]

    def _unseen(self) -> Story:
        bend = at(self.page.job, "/result/unseen_bend")
        if bend["y"] is None:
            return [self.text(f"No bound on the unseen bend: {bend['reason']}.")]
        in_x = "" if bend["x"] is None else f", {self.number('/result/unseen_bend/x')}{self.unit('x')} in x"
        size = f"{self.number('/result/unseen_bend/y')}{self.unit('y')}"
        return [self.text(f"Unseen bend: up to {size}{in_x} could hide in these data.")]

    def _candidates(self) -> Story:
        head = ["Degree", "CV error", "SD", "Residual SD", "R²", "Step p", "Lack of fit p", "AICc", "BIC"]
        chosen = at(self.page.job, "/result/chosen_degree")
        rows = []
        for i, one in enumerate(at(self.page.job, "/result/candidates")):
            where = f"/result/candidates/{i}"
            fit = "none" if one["lack_of_fit"] is None else self.number(f"{where}/lack_of_fit/p", 2)
            mark = ", chosen" if one["degree"] == chosen else ""
            rows.append(
                [f"{one['degree']}{mark}"]
                + [self.number(f"{where}/{path}", digits) for path, digits in CANDIDATE]
                + [fit]
                + [self.number(f"{where}/{path}", 5) for path in ("aicc", "bic")]
            )
        table = self.table(head, rows, [1.3, 1.2, 1, 1.2, 1.4, 1, 1.2, 1.1, 1.1], right=frozenset(range(1, 9)))
        note = self.text("Errors are in the unit of y; step p tests that term alone.", "caution")
        return [KeepTogether([self.text("Candidates", "head"), table, note])]

    def _warnings(self) -> Story:
        found = at(self.page.job, "/result/warnings")
        reasons = {one["message"] for one in self.signed["reasons"]}
        lines = [
            self.text(f"{one['severity'].capitalize()}, {words.plain(one['code'])}: {one['message']}")
            for one in found
            if one["message"] not in reasons
        ]
        if not lines:
            said = "None besides the reasons of the verdict." if found else "None."
            lines = [self.text(said)]
        return [self.text("Warnings", "head"), *lines]

    def _checks(self) -> Story:
        found = at(self.page.job, "/result/diagnostics")
        rows = [
            [
                title,
                self.number(f"/result/diagnostics/{name}/statistic"),
                self.number(f"/result/diagnostics/{name}/p", 2),
            ]
            for name, title in words.CHECKS.items()
            if name in found and found[name]["statistic"] is not None
        ]
        if not rows:
            return []
        table = halved(self, ["Check", "Statistic", "p"], rows, right=frozenset({1, 2}))
        return [KeepTogether([self.text("Checks", "head"), table])]


COLUMNS = (("standard_errors", 4), ("t", 4), ("p", 2))
CANDIDATE = (("cv/rmse_mean", 4), ("cv/rmse_sd", 2), ("residual_sd", 4), ("r2", 7), ("step/p", 2))
