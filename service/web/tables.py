"""Datasets that come as CSV text. pyarrow reads it; where it will not, Python's reader finds the line and the column.

A header, comma or semicolon, decimal point, UTF-8 with or without a byte order mark, any line ends, quotes where one
likes; empty lines do not count, spaces around values neither.
"""

import csv
import io
import re
from collections.abc import Iterator, Sequence
from itertools import islice
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from service.core.observations import Floats
from service.errors import FieldError, InvalidInput, MalformedInput
from service.store.records import DatasetContent

NUMBERS = ("x", "y", "u_x", "u_y")
KNOWN = (*NUMBERS, "series")
LONGEST_LABEL = 200
MOST_ERRORS = 20
# What nearly every cell looks like, surely finite; only of the others is pyarrow asked one by one, which is slow.
PLAIN = re.compile(r"-?([0-9]{1,30}(\.[0-9]{0,30})?|\.[0-9]{1,30})([eE][-+]?[0-9]{1,2})?")


def read_csv(body: bytes, *, subject: str, details: dict[str, Any]) -> DatasetContent:
    """The table. Raises MalformedInput, InvalidInput that names line and column."""
    try:
        whole = body.decode("utf-8-sig").replace("\r\n", "\n").replace("\r", "\n")
    except UnicodeDecodeError as error:
        raise MalformedInput.at("", f"the body is not UTF-8: byte {error.start}") from error
    text = whole.lstrip("\n")
    if not text.strip():
        raise MalformedInput.at("", "the body is empty; a header and lines of numbers are expected")
    header, _, lines = text.partition("\n")
    delimiter = ";" if header.count(";") > header.count(",") else ","
    names = _names(header, delimiter, line=len(whole) - len(text) + 1)
    demand_columns(names)
    try:
        columns = _read(lines, names, delimiter)
    except (pa.ArrowInvalid, _NotFinite) as error:
        found = list(islice(_wrong(lines, names, delimiter, first=len(whole) - len(text) + 2), MOST_ERRORS))
        if not found:
            raise MalformedInput.at("", f"the body is not CSV: {str(error).splitlines()[0][:200]}") from error
        raise InvalidInput(found) from error
    labels = None
    if "series" in names:
        labels = columns["series"].to_pylist()
        demand_labels(labels)
    return content_of({name: columns[name] for name in NUMBERS if name in names}, labels, subject, details)


def _names(header: str, delimiter: str, *, line: int) -> list[str]:
    """The columns' names. Raises MalformedInput where Python's reader gives up: a field of 131,073 characters."""
    try:
        return [name.strip() for name in next(csv.reader([header], delimiter=delimiter))]
    except csv.Error as error:
        raise MalformedInput.at("", f"line {line}, the header: {error}") from error


class _NotFinite(Exception):
    """A number that is none: pyarrow reads nan, inf, and 1e999."""


def _read(lines: str, names: list[str], delimiter: str) -> dict[str, Any]:
    """Columns of doubles, and of text. Raises ArrowInvalid, _NotFinite."""
    if not lines.strip():
        return {name: np.empty(0) if name in NUMBERS else pa.chunked_array([[]], pa.string()) for name in names}
    table = pacsv.read_csv(
        io.BytesIO(lines.encode()),
        read_options=pacsv.ReadOptions(column_names=names, use_threads=False),
        parse_options=pacsv.ParseOptions(delimiter=delimiter),
        convert_options=pacsv.ConvertOptions(
            column_types={name: pa.string() for name in names}, strings_can_be_null=False
        ),
    )
    found: dict[str, Any] = {}
    for name in names:
        column = pc.utf8_trim_whitespace(table.column(name))
        if name in NUMBERS:
            column = np.asarray(pc.cast(column, pa.float64()), dtype=np.float64)
            if not np.isfinite(column).all():
                raise _NotFinite(f"{name} holds a number that is not finite")
        found[name] = column
    return found


def _wrong(lines: str, names: list[str], delimiter: str, *, first: int) -> Iterator[FieldError]:
    """What is wrong, line by line; `first` is the number of the first of `lines` in the body."""
    reader = csv.reader(io.StringIO(lines), delimiter=delimiter)
    point = 0
    before = first
    try:
        for row in reader:
            line, before = before, first + reader.line_num
            if not row or row == [""]:
                continue
            if len(row) != len(names):
                hint = "; use a decimal point" if delimiter == "," and len(row) == 2 * len(names) else ""
                message = f"line {line} has {len(row)} values where the header has {len(names)}{hint}"
                yield FieldError("", message)
                continue
            for name, text in zip(names, row, strict=True):
                why = _not_a_number(text.strip()) if name in NUMBERS else None
                if why is not None:
                    yield FieldError(f"/{name}/{point}", f"line {line}, column {name}: {text.strip()[:40]!r} {why}")
            point += 1
    except csv.Error as error:
        yield FieldError("", f"line {before}: {error}")


def _not_a_number(text: str) -> str | None:
    if PLAIN.fullmatch(text):
        return None
    try:
        value = pc.cast(pa.scalar(text), pa.float64()).as_py()
    except pa.ArrowInvalid:
        return "is not a number" + ("; use a decimal point" if "," in text else "")
    return None if np.isfinite(value) else "is not a finite number"


def demand_columns(names: Sequence[str]) -> None:
    """Raises InvalidInput unless these are x, y and perhaps u_x, u_y, series, each once."""
    bad = [FieldError(f"/{name[:80]}", "is not a known column") for name in names if name not in KNOWN]
    bad += [FieldError(f"/{name}", "is missing") for name in ("x", "y") if name not in names]
    bad += [FieldError(f"/{name}", "stands twice in the header") for name in KNOWN if names.count(name) > 1]
    if bad:
        raise InvalidInput(
            bad[:MOST_ERRORS],
            message=f"the columns must be x, y and perhaps u_x, u_y, series, with comma or semicolon; {bad[0]}",
        )


def demand_labels(labels: Sequence[Any]) -> None:
    """Raises InvalidInput unless each is a word that can be shown."""
    for number, label in enumerate(labels):
        if not (isinstance(label, str) and 0 < len(label) <= LONGEST_LABEL and label.isprintable()):
            message = f"must be text of 1 to {LONGEST_LABEL} printable characters"
            raise InvalidInput.at(f"/series/{number}", message)
        if not label.strip():
            raise InvalidInput.at(f"/series/{number}", "must hold a visible character")


def content_of(
    numbers: dict[str, Floats], labels: Sequence[Any] | None, subject: str, details: dict[str, Any]
) -> DatasetContent:
    """The dataset that these columns are."""
    return DatasetContent(
        subject=subject,
        x=numbers["x"],
        y=numbers["y"],
        u_x=numbers.get("u_x"),
        u_y=numbers.get("u_y"),
        series=None if labels is None else tuple(labels),
        details=details,
    )
