"""Reads the reference data beside this file."""

import csv
import json
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

HERE = Path(__file__).parent
Floats = npt.NDArray[np.float64]

STRD = ("norris", "pontius", "noint1", "noint2", "filip", "wampler1", "wampler2", "wampler3", "wampler4", "wampler5")
R_SETS = (
    "alaska_pipeline",
    "anscombe_1",
    "anscombe_2",
    "anscombe_3",
    "anscombe_4",
    "auto_mpg_horsepower",
    "cars",
    "filip",
    "linewidth_40",
    "load_cell_11_levels",
    "load_cell_pontius",
    "norris",
    "pressure",
    "thermocouple_simulated",
    "wage_age",
    "wampler4",
    "women",
)


@dataclass(frozen=True, eq=False)
class Columns:
    """x and y of one file: as text with every published digit, and as doubles."""

    x_text: list[str]
    y_text: list[str]

    @property
    def x(self) -> Floats:
        return np.array(self.x_text, dtype=np.float64)

    @property
    def y(self) -> Floats:
        return np.array(self.y_text, dtype=np.float64)


@cache
def columns(path: str, y: str = "y") -> Columns:
    """`path` relative to this folder, such as open_data/cars.csv."""
    with (HERE / path).open(newline="") as file:
        rows = list(csv.DictReader(file))
    return Columns([row["x"] for row in rows], [row[y] for row in rows])


@cache
def values(path: str) -> Any:
    """A JSON file of this folder; do not change what it returns."""
    return json.loads((HERE / path).read_text())


def r_columns(name: str) -> Columns:
    """The data behind r_values/<name>.json."""
    meta = values(f"r_values/{name}.json")
    if "source_csv" in meta:
        return columns(meta["source_csv"])
    folder = next(f for f in ("open_data", "handbook") if (HERE / f / meta["csv"]).exists())
    return columns(f"{folder}/{meta['csv']}")


def relative(found: float, reference: float) -> float:
    """Relative difference; 0 when equal."""
    return 0.0 if found == reference else abs(found - reference) / max(abs(found), abs(reference))
