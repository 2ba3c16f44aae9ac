"""Datasets that come as tables: CSV text and Apache Parquet, read by pyarrow. Errors name line and column."""

import io
from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from service.core.observations import Floats
from service.errors import FieldError, InvalidInput, MalformedInput, TooLarge
from service.store.records import DatasetContent

NUMBERS = ("x", "y", "u_x", "u_y")
KNOWN = (*NUMBERS, "series")
MOST_BYTES_A_POINT = 400  # of a Parquet file when decompressed: five columns, one of them text
LONGEST_LABEL = 200


def read_csv(body: bytes, *, subject: str, details: dict[str, Any]) -> DatasetContent:
    """CSV with a header, comma or semicolon, decimal point, UTF-8. Raises MalformedInput, InvalidInput."""
    try:
        text = body.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise MalformedInput.at("", f"the body is not UTF-8: byte {error.start}") from error
    header = text.lstrip().split("\n", 1)[0]
    delimiter = ";" if header.count(";") > header.count(",") else ","
    ragged: list[str] = []

    def note(row: pacsv.InvalidRow) -> str:
        where = "a line" if row.number is None else f"line {row.number}"
        ragged.append(f"{where} has {row.actual_columns} values where the header has {row.expected_columns}")
        return "skip"

    names = [name.strip().strip('"') for name in header.strip().split(delimiter)]
    _demand_columns(names)
    try:
        table = pacsv.read_csv(
            io.BytesIO(text.encode()),
            read_options=pacsv.ReadOptions(column_names=names, skip_rows=1, use_threads=False),
            parse_options=pacsv.ParseOptions(delimiter=delimiter, invalid_row_handler=note),
            convert_options=pacsv.ConvertOptions(
                column_types={name: pa.string() for name in names}, strings_can_be_null=False
            ),
        )
    except pa.ArrowInvalid as error:
        raise MalformedInput.at("", f"the body is not CSV: {str(error).splitlines()[0][:200]}") from error
    if ragged:
        raise InvalidInput([FieldError("", message) for message in ragged[:20]])
    numbers = {name: _parsed(table.column(name), name) for name in NUMBERS if name in names}
    return _content(numbers, table.column("series").to_pylist() if "series" in names else None, subject, details)


def read_parquet(body: bytes, *, most: int, subject: str, details: dict[str, Any]) -> DatasetContent:
    """Apache Parquet with columns x, y and perhaps u_x, u_y, series. Raises MalformedInput, InvalidInput, TooLarge."""
    try:
        file = pq.ParquetFile(io.BytesIO(body))
        rows = file.metadata.num_rows
        if rows > most:
            raise TooLarge(f"the dataset has {rows} points; at most {most} are taken")
        _demand_columns(file.schema_arrow.names)
        size = sum(file.metadata.row_group(i).total_byte_size for i in range(file.metadata.num_row_groups))
        if size > MOST_BYTES_A_POINT * max(rows, 1000):
            raise TooLarge("the file decompresses to more than its number of points can need")
        table = file.read(use_threads=False)
    except (pa.ArrowException, OSError, OverflowError) as error:
        raise MalformedInput.at("", f"the body is not Parquet: {str(error).splitlines()[0][:200]}") from error
    names = table.column_names
    numbers = {name: _doubles(table.column(name), name) for name in NUMBERS if name in names}
    labels = None
    if "series" in names:
        if not pa.types.is_string(table.schema.field("series").type):
            raise InvalidInput.at("/series", "must be a column of text")
        labels = table.column("series").to_pylist()
    return _content(numbers, labels, subject, details)


def _demand_columns(names: Sequence[str]) -> None:
    bad = [FieldError(f"/{name}", "is not a known column") for name in names if name not in KNOWN]
    bad += [FieldError(f"/{name}", "is missing") for name in ("x", "y") if name not in names]
    bad += [FieldError(f"/{name}", "stands twice in the header") for name in set(names) if names.count(name) > 1]
    if bad:
        raise InvalidInput(bad[:20], message=f"the columns must be x, y and perhaps u_x, u_y, series; {bad[0]}")


def _parsed(column: pa.ChunkedArray, name: str) -> Floats:
    trimmed = pc.utf8_trim_whitespace(column)
    try:
        return np.asarray(pc.cast(trimmed, pa.float64()), dtype=np.float64)
    except pa.ArrowInvalid as error:
        for number, text in enumerate(trimmed.to_pylist()):
            try:
                pc.cast(pa.scalar(text), pa.float64())
            except pa.ArrowInvalid:
                hint = "; use a decimal point" if "," in text else ""
                message = f"line {number + 2}, column {name}: {text[:40]!r} is not a number{hint}"
                raise InvalidInput.at(f"/{name}/{number}", message) from error
        raise


def _doubles(column: pa.ChunkedArray, name: str) -> Floats:
    if not (pa.types.is_floating(column.type) or pa.types.is_integer(column.type)):
        raise InvalidInput.at(f"/{name}", f"must be a column of numbers, not {column.type}")
    if column.null_count:
        first = pc.index(column.is_null(), pa.scalar(True)).as_py()
        raise InvalidInput.at(f"/{name}/{first}", "is null")
    return np.asarray(column.cast(pa.float64(), safe=False), dtype=np.float64)


def _content(
    numbers: dict[str, Floats], labels: list[Any] | None, subject: str, details: dict[str, Any]
) -> DatasetContent:
    for name, column in numbers.items():
        wrong = np.flatnonzero(~np.isfinite(column))
        if wrong.size:
            raise InvalidInput.at(f"/{name}/{wrong[0]}", f"row {wrong[0] + 1}: must be a finite number")
    for number, label in enumerate(labels or ()):
        usable = isinstance(label, str) and 0 < len(label) <= LONGEST_LABEL and label.isprintable()
        if not usable:
            raise InvalidInput.at(f"/series/{number}", f"must be text of 1 to {LONGEST_LABEL} printable characters")
    return DatasetContent(
        subject=subject,
        x=numbers["x"],
        y=numbers["y"],
        u_x=numbers.get("u_x"),
        u_y=numbers.get("u_y"),
        series=None if labels is None else tuple(labels),
        details=details,
    )
