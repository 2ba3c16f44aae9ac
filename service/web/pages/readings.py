"""The readings of a job as a table: as the dataset holds them, beside what the chosen curve makes of them.

A report is read on paper, so it lists a bounded number, and says where the others are.
"""

from dataclasses import dataclass, replace
from typing import Any

from service.store.records import DatasetContent
from service.web.schemas.datasets import points_view

MOST_LISTED = 120
ONE_TABLE = 8  # readings; more stand in two tables side by side
OF_DATASET = ("x", "u_x", "y", "u_y")
OF_RESULT = ("fitted", "residual")
DIGITS = {"fitted": 8, "residual": 4}


@dataclass(frozen=True, kw_only=True, slots=True)
class Column:
    """One column of numbers. `document`: that of the API which holds it, at `pointer` and the index of the reading."""

    name: str
    document: dict[str, Any]
    pointer: str
    digits: int | None

    def at(self, index: int) -> str:
        """Pointer of one reading's number."""
        return f"{self.pointer}/{index}"


@dataclass(frozen=True, kw_only=True, slots=True)
class Readings:
    """The first `listed` readings in the order measured. `series`: their labels, if any; `blocks`: first and last but
    one index of each table; `note`: what is left out and where it is, empty if nothing is."""

    columns: tuple[Column, ...]
    series: list[str] | None
    listed: int
    blocks: tuple[tuple[int, int], ...]
    note: str


def readings_of(content: DatasetContent, dataset: dict[str, Any], job: dict[str, Any]) -> Readings:
    """`dataset`, `job`: as the API answers them, without points."""
    total, listed = content.x.size, min(content.x.size, MOST_LISTED)
    with_points = {**dataset, "points": points_view(_first(content, listed))}
    known = job["result"]["diagnostics"]["points"] is not None
    columns = [
        Column(name=name, document=with_points, pointer=f"/points/{name}", digits=None)
        for name in OF_DATASET
        if with_points["points"][name] is not None
    ]
    columns += [
        Column(name=name, document=job, pointer=f"/result/diagnostics/points/{name}", digits=DIGITS[name])
        for name in OF_RESULT
        if known
    ]
    half = listed if listed <= ONE_TABLE else (listed + 1) // 2
    return Readings(
        columns=tuple(columns),
        series=with_points["points"]["series"],
        listed=listed,
        blocks=((0, half),) if half == listed else ((0, half), (half, listed)),
        note=_note(total, listed, dataset, job),
    )


def _first(content: DatasetContent, most: int) -> DatasetContent:
    return replace(
        content,
        x=content.x[:most],
        y=content.y[:most],
        u_x=None if content.u_x is None else content.u_x[:most],
        u_y=None if content.u_y is None else content.u_y[:most],
        series=None if content.series is None else content.series[:most],
    )


def _note(total: int, listed: int, dataset: dict[str, Any], job: dict[str, Any]) -> str:
    diagnostics, said = job["result"]["diagnostics"], []
    if total > listed:
        said.append(
            f"Listed are the first {listed} of {total} readings in the order measured. The other {total - listed} are"
            f" answered by GET /v1/datasets/{dataset['id']}?include=points"
        )
        if diagnostics["points"] is not None:
            said.append(f", their fitted values and residuals by GET /v1/jobs/{job['id']} in result.diagnostics.points")
        said.append(".")
    if diagnostics["points"] is None:
        said.append(f" Fitted values and residuals are {diagnostics['points_reason']}.")
    return "".join(said).strip()
