"""Datasets that come as Apache Parquet, read by pyarrow. A file says itself how large it is, so it is not believed:
rows are read bit by bit, and text stays a dictionary until it is known to be short.
"""

import io
import threading
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from service.errors import InvalidInput, MalformedInput, TooLarge
from service.store.records import DatasetContent
from service.web.tables import LONGEST_LABEL, NUMBERS, content_of, demand_columns, demand_labels

MOST_BYTES_A_POINT = 400  # as the file states it: five columns, one of them text
ROWS = 65_536  # decompressed at once
ONE_AT_A_TIME = threading.Lock()  # a page may decompress to much more than the body: never in two threads at once


def read_parquet(body: bytes, *, most: int, subject: str, details: dict[str, Any]) -> DatasetContent:
    """Columns x, y and perhaps u_x, u_y, series. Raises MalformedInput, InvalidInput, TooLarge."""
    with ONE_AT_A_TIME:
        try:
            columns = _columns(body, most)
        except (pa.ArrowException, OSError, OverflowError, ValueError, UnicodeDecodeError) as error:
            raise MalformedInput.at("", f"the body is not Parquet: {_first_line(error)}") from error
    labels = columns.pop("series", None)
    if labels is not None:
        demand_labels(labels)
    return content_of({name: np.concatenate(parts) for name, parts in columns.items()}, labels, subject, details)


def _columns(body: bytes, most: int) -> dict[str, Any]:
    file = pq.ParquetFile(io.BytesIO(body))
    rows = file.metadata.num_rows
    if rows > most:
        raise TooLarge(f"the dataset has {rows} points; at most {most} are taken")
    names = file.schema_arrow.names
    demand_columns(names)
    size = sum(file.metadata.row_group(i).total_byte_size for i in range(file.metadata.num_row_groups))
    if size > MOST_BYTES_A_POINT * max(rows, 1000):
        raise TooLarge("the file decompresses to more than its number of points can need")
    for name in names:
        _demand_type(name, file.schema_arrow.field(name).type)
    if "series" in names:
        file = pq.ParquetFile(io.BytesIO(body), read_dictionary=["series"])
    found: dict[str, Any] = {name: [np.empty(0)] if name in NUMBERS else [] for name in names}
    read = 0
    for batch in file.iter_batches(batch_size=ROWS, use_threads=False):
        for name in names:
            if name in NUMBERS:
                found[name].append(_doubles(batch.column(name), name, read))
            else:
                found[name] += _labels(batch.column(name), read)
        read += batch.num_rows
        if read > rows:
            raise TooLarge("the file holds more rows than it says")
    return found


def _demand_type(name: str, kind: pa.DataType) -> None:
    if name in NUMBERS:
        if not (pa.types.is_floating(kind) or pa.types.is_integer(kind)):
            raise InvalidInput.at(f"/{name}", f"must be a column of numbers, not {kind}")
        return
    inner = kind.value_type if pa.types.is_dictionary(kind) else kind
    if not (pa.types.is_string(inner) or pa.types.is_large_string(inner)):
        raise InvalidInput.at(f"/{name}", f"must be a column of text, not {inner}")


def _doubles(column: pa.Array, name: str, before: int) -> Any:
    if column.null_count:
        first = before + pc.index(column.is_null(), pa.scalar(True)).as_py()
        raise InvalidInput.at(f"/{name}/{first}", "is null")
    values = np.asarray(column.cast(pa.float64(), safe=False), dtype=np.float64)
    wrong = np.flatnonzero(~np.isfinite(values))
    if wrong.size:
        raise InvalidInput.at(f"/{name}/{before + wrong[0]}", f"row {before + wrong[0] + 1}: must be a finite number")
    return values


def _labels(column: Any, before: int) -> list[Any]:
    words = column.dictionary if pa.types.is_dictionary(column.type) else column
    if len(words) and (pc.max(pc.utf8_length(words)).as_py() or 0) > LONGEST_LABEL:
        raise InvalidInput.at("/series", f"must hold no label of more than {LONGEST_LABEL} characters")
    if column.null_count:
        first = before + pc.index(column.is_null(), pa.scalar(True)).as_py()
        raise InvalidInput.at(f"/series/{first}", "is null")
    return list(column.to_pylist())


def _first_line(error: Exception) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0][:200]
