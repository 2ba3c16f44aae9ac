"""What people paste: a table as spreadsheets put it on the clipboard, CSV with or without a header, or JSON.

Whatever is wrong with it is named by the line and column that they see, not by what the table was turned into.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from service.errors import FieldError, InvalidInput
from service.store.records import DatasetContent
from service.web.pages.labels import field_label, named_by
from service.web.schemas.datasets import DatasetBody
from service.web.strict_json import parse_json, read_value
from service.web.tables import read_csv

BOM = b"\xef\xbb\xbf"
NUMBER_STARTS = b"0123456789+-."
LINE = re.compile(r"^line (\d+)")
COUNT = re.compile(r" has (\d+) values where the header has 2")
OF_READING = re.compile(r"^(?:/dataset)?/(x|y|u_x|u_y|series)/(\d+)$")
OF_COLUMN = re.compile(r"^/dataset/(x|y|u_x|u_y|series)$")


@dataclass(frozen=True, kw_only=True, slots=True)
class Table:
    """A table as CSV with a header. `before`: lines as pasted that stand before those of `csv`; `named`: whether the
    header is part of what was pasted."""

    csv: bytes
    before: int
    named: bool

    def label(self, pointer: str) -> str:
        """Line and column, as pasted."""
        if reading := OF_READING.match(pointer):
            return f"{self._place(int(reading[2]))}, column {reading[1]}"
        if column := OF_COLUMN.match(pointer):
            return f"column {column[1]}"
        if pointer.startswith(("/dataset", "/plan")):
            return field_label(pointer)
        return f"line {self.before + 1}, column {pointer[1:] or 'without a name'}"  # of the header

    def message(self, message: str) -> str:
        """With the line's number as pasted."""
        message = LINE.sub(lambda found: f"line {self._line(int(found[1]))}", message)
        if not self.named:
            message = COUNT.sub(_expected, message)
        return message

    def _line(self, of_csv: int) -> int:
        return of_csv + self.before - (not self.named)

    def _place(self, reading: int) -> str:
        """Empty lines do not count as readings; a quoted text may run over lines, so there no line can be told."""
        lines = self.csv.split(b"\n")
        filled = [number for number, line in enumerate(lines, start=1) if line.strip()]
        if b'"' in self.csv or reading + 1 >= len(filled):
            return f"reading {reading + 1}"
        return f"line {self._line(filled[reading + 1])}"


def is_json(body: bytes) -> bool:
    """Whether it begins as a JSON object does."""
    return body.removeprefix(BOM).lstrip()[:1] == b"{"


def table_of(body: bytes) -> Table:
    """The pasted table as CSV: tabs are separators, and a header is put where there is none. `body`: not all blank."""
    lines = body.removeprefix(BOM).replace(b"\r\n", b"\n").replace(b"\r", b"\n").split(b"\n")
    filled = [number for number, line in enumerate(lines) if line.strip()]
    before = filled[0]
    table = b"\n".join(lines[before : filled[-1] + 1]).replace(b"\t", b";") + b"\n"
    first = table.partition(b"\n")[0]
    separator = b";" if b";" in first else b","
    if _is_header(first.split(separator)):
        return Table(csv=table, before=before, named=True)
    return Table(csv=b"x" + separator + b"y\n" + table, before=before, named=False)


def _is_header(cells: Sequence[bytes]) -> bool:
    """Whether no cell begins as a number does: a wrong name is better called so than taken for a bad number."""
    return not any(cell.strip(b" \"'")[:1] in NUMBER_STARTS for cell in cells if cell.strip(b" \"'"))


def _expected(found: re.Match[str]) -> str:
    values = "1 value" if found[1] == "1" else f"{found[1]} values"
    more = "; name the columns in a first line if there are others" if int(found[1]) > 2 else ""
    return f" has {values}: x and y are expected, with comma, semicolon or tab between{more}"


def read_table(table: Table, *, subject: str, details: dict[str, Any]) -> DatasetContent:
    """Raises InvalidInput that says line and column in words."""
    try:
        return read_csv(table.csv, subject=subject, details=details)
    except InvalidInput as error:
        said = [replace(one, message=table.message(one.message)) for one in error.errors]
        plain = [FieldError("", one.message) if one.message.startswith("line ") else one for one in said]
        with named_by(lambda pointer: table.label(pointer) if pointer else ""):
            raise InvalidInput(plain) from error


def json_label(pointer: str) -> str:
    """Where in pasted JSON something stands; a subject that is missing there belongs into its field."""
    if not pointer.removeprefix("/dataset"):
        return ""
    if pointer.startswith("/plan"):
        return field_label(pointer)
    name, _, item = pointer.removeprefix("/dataset").removeprefix("/").partition("/")
    place = f", item {int(item) + 1}" if item.isdecimal() else f", {item}" if item else ""
    return f"{name} in the JSON{place}"


def read_json(body: bytes, typed: dict[str, Any]) -> DatasetContent:
    """The JSON of a dataset; what was typed into the form wins over what stands in it. Raises InvalidInput."""
    value = parse_json(body.removeprefix(BOM))
    if "subject" not in value | typed:
        raise InvalidInput.at("", "Subject is missing, in its field and in the JSON")
    with named_by(json_label):
        return read_value(DatasetBody, value | typed).content()
