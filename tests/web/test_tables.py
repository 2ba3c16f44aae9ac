"""Datasets as CSV and Parquet: what is taken, and every mistake named by line and column."""

import io
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from service.errors import InvalidInput, MalformedInput, TooLarge
from service.web import tables
from service.web.parquet import read_parquet
from service.web.tables import read_csv
from tests.web.service import Service


def csv(text: str | bytes) -> Any:
    return read_csv(text.encode() if isinstance(text, str) else text, subject="A", details={})


TAKEN = {
    "comma": "x,y\n1,2\n2,3\n3,4\n",
    "semicolon": "x;y\n1;2\n2;3\n3;4\n",
    "no line end at the end": "x,y\n1,2\n2,3\n3,4",
    "carriage returns": "x,y\r\n1,2\r\n2,3\r\n3,4\r\n",
    "carriage returns alone": "x,y\r1,2\r2,3\r3,4\r",
    "byte order mark": "\ufeffx,y\n1,2\n2,3\n3,4\n",
    "quotes": '"x","y"\n"1",2\n2,"3"\n3,4\n',
    "spaces": " x , y \n 1 ,2 \n2\t,3\n3,  4\n",
    "empty lines": "\n\nx,y\n\n1,2\n\n\n2,3\n3,4\n\n",
    "columns the other way round": "y,x\n2,1\n3,2\n4,3\n",
    "exponents": "x,y\n1e0,2.0\n2,.3E1\n3.,4\n",
}


@pytest.mark.parametrize("text", TAKEN.values(), ids=TAKEN.keys())
def test_tables_that_say_the_same(text: str) -> None:
    content = csv(text)
    assert content.x.tolist() == [1, 2, 3]
    assert content.y.tolist() == [2, 3, 4]


def test_all_columns_of_a_table() -> None:
    content = csv('x;y;u_x;u_y;series\n1;2;0.1;0.2;up\n2;3;0.1;0.2; "up"\n3;4;0.1;0.2;"a;b"\n')
    assert content.u_x is not None
    assert content.u_y is not None
    assert content.u_x.tolist() == [0.1] * 3
    assert content.u_y.tolist() == [0.2] * 3
    assert content.series == ("up", '"up"', "a;b")


def test_numbers_are_read_to_the_last_bit() -> None:
    values = [0.1, 1 / 3, 5e-324 * 2**60, 123456789.123456789, -2.2250738585072014e-308 * 2**80, 1.7976931348623157e100]
    content = csv("x,y\n" + "".join(f"{value!r},{value!r}\n" for value in values))
    assert content.x.tolist() == values


REFUSED = [
    ("x,y\n1,2\n2,three\n3,4\n", "/y/1", "line 3, column y: 'three' is not a number"),
    ("x;y\n1;2\n2,5;3\n3;4\n", "/x/1", "line 3, column x: '2,5' is not a number; use a decimal point"),
    ("x,y\n1,5,2,5\n", "", "line 2 has 4 values where the header has 2; use a decimal point"),
    ("x,y\n1,2\n2\n3,4\n", "", "line 3 has 1 values where the header has 2"),
    ("x,y\n1,2\n\n\n2,\n", "/y/1", "line 5, column y: '' is not a number"),
    ("\n\nx,y\r\n1,2\r\n2,q\r\n", "/y/1", "line 5, column y: 'q' is not a number"),
    ('x,y\n"1\n",2\n2,q\n', "/y/1", "line 4, column y: 'q' is not a number"),
    ("x,y\n1,nan\n", "/y/0", "line 2, column y: 'nan' is not a finite number"),
    ("x,y\n1,-inf\n", "/y/0", "line 2, column y: '-inf' is not a finite number"),
    ("x,y\n1,1e999\n", "/y/0", "line 2, column y: '1e999' is not a finite number"),
    ("x,y\n1,NULL\n", "/y/0", "line 2, column y: 'NULL' is not a number"),
    ("x,y\n1,0x10\n", "/y/0", "line 2, column y: '0x10' is not a number"),
    ("x,y\n1,1_000\n", "/y/0", "line 2, column y: '1_000' is not a number"),
    ("x,y\n1,2\x00\n", "/y/0", "line 2, column y: '2\\x00' is not a number"),
    ("x,z\n1,2\n", "/z", "is not a known column"),
    ("x,z\n1,2\n", "/y", "is missing"),
    ("x,y,x\n1,2,3\n", "/x", "stands twice in the header"),
    ("1,2\n2,3\n", "/x", "is missing"),
    ("x\ty\n1\t2\n", "/x", "is missing"),
    ("x,y,series\n1,2,\n", "/series/0", "must be text of 1 to 200 printable characters"),
    ("x,y,series\n1,2," + "a" * 201 + "\n", "/series/0", "must be text of 1 to 200 printable characters"),
]


@pytest.mark.parametrize(("text", "pointer", "message"), REFUSED)
def test_a_mistake_is_named_by_line_and_column(text: str, pointer: str, message: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        csv(text)
    assert (pointer, message) in [(one.pointer, one.message) for one in raised.value.errors]


def test_every_mistake_is_named_up_to_a_bound() -> None:
    with pytest.raises(InvalidInput) as raised:
        csv("x,y\n" + "1,q\n" * 50)
    assert [one.message.split(",")[0] for one in raised.value.errors] == [f"line {i}" for i in range(2, 22)]


def test_one_wrong_cell_of_many_is_found_without_asking_pyarrow_of_each(monkeypatch: pytest.MonkeyPatch) -> None:
    asked = []
    whole = tables.pc.cast
    monkeypatch.setattr(tables.pc, "cast", lambda *words: asked.append(words) or whole(*words))
    with pytest.raises(InvalidInput) as raised:
        csv("x,y\n" + "-1.5,.25e-3\n" * 20_000 + "1,q\n")
    assert [one.pointer for one in raised.value.errors] == ["/y/20000"]
    assert len(asked) == 3  # the two columns as a whole, and the cell


def test_no_more_lines_are_read_than_mistakes_are_named(monkeypatch: pytest.MonkeyPatch) -> None:
    looked_at = []
    whole = tables._not_a_number
    monkeypatch.setattr(tables, "_not_a_number", lambda text: looked_at.append(text) or whole(text))
    with pytest.raises(InvalidInput) as raised:
        csv("x,y\n" + "1,q\n" * 20_000)
    assert len(raised.value.errors) == tables.MOST_ERRORS
    assert len(looked_at) == 2 * tables.MOST_ERRORS


@pytest.mark.parametrize("text", ["x,y" + "a" * 140_000, '"x,y\n1,2', "x," + '"' + "y" * 140_000], ids=len)
def test_a_header_that_is_none_is_refused(text: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        csv(text + "\n1,2\n")
    assert all(one.message for one in raised.value.errors)


def test_a_very_long_field_is_malformed(service: Service) -> None:
    long = "1" * 140_000
    for text, status in ((f"\n{long},y\n1,2\n", 400), (f"x,y\n1,2\n{long},q\n", 422)):
        answer = service.http.post(
            "/v1/datasets?subject=A", content=text.encode(), headers={"Content-Type": "text/csv"}
        )
        assert answer.status_code == status, answer.text
        assert "larger than field limit" in answer.json()["errors"][0]["message"]
        assert answer.json()["errors"][0]["message"].startswith(("line 2, the header", "line 3"))


@pytest.mark.parametrize("body", [b"", b"\n\n", b" ", b"\xef\xbb\xbf", b"\xff\xfex\x00,\x00y\x00", b"x,y\n\xff,1\n"])
def test_what_is_no_text_is_malformed(body: bytes) -> None:
    with pytest.raises(MalformedInput):
        csv(body)


def test_a_header_alone_has_too_few_points(service: Service) -> None:
    for text in ("x,y", "x,y\n", "x,y,series\n\n"):
        answer = service.http.post(
            "/v1/datasets?subject=A", content=text.encode(), headers={"Content-Type": "text/csv"}
        )
        assert answer.status_code == 422
        assert answer.json()["errors"] == [{"pointer": "/x", "message": "needs at least 3 points, has 0"}]


def parquet(columns: dict[str, Any], *, most: int = 1000, **options: Any) -> Any:
    buffer = io.BytesIO()
    pq.write_table(pa.table(columns), buffer, **options)
    return read_parquet(buffer.getvalue(), most=most, subject="A", details={})


@pytest.mark.parametrize(
    "labels",
    [
        pa.array(["up", "up", "down"]),
        pa.array(["up", "up", "down"], pa.large_string()),
        pa.array(["up", "up", "down"]).dictionary_encode(),
    ],
)
def test_parquet_gives_the_same_as_json(labels: Any) -> None:
    content = parquet({"x": [1, 2, 3], "y": pa.array([1.5, 2, 3], pa.float32()), "series": labels})
    assert content.x.tolist() == [1, 2, 3]
    assert content.y.tolist() == [1.5, 2, 3]
    assert content.series == ("up", "up", "down")


def test_parquet_as_pandas_writes_it() -> None:
    frame = pd.DataFrame({"x": [1, 2, 3], "y": [1.5, 2, 3], "series": ["up", "up", "down"]})
    content = read_parquet(frame.to_parquet(), most=10, subject="A", details={})
    assert content.series == ("up", "up", "down")


def test_parquet_of_many_batches() -> None:
    x = np.arange(200_000) / 7
    labels = [f"day {i % 9}" for i in range(x.size)]
    content = parquet({"x": x, "y": x[::-1].copy(), "series": labels}, most=200_000, row_group_size=70_000)
    assert content.x.tolist() == x.tolist()
    assert content.y.tolist() == x[::-1].tolist()
    assert list(content.series) == labels


@pytest.mark.parametrize(
    ("columns", "pointer"),
    [
        ({"x": ["1", "2", "3"], "y": [1, 2, 3]}, "/x"),
        ({"x": [True, False, True], "y": [1, 2, 3]}, "/x"),
        ({"x": [[1], [2], [3]], "y": [1, 2, 3]}, "/x"),
        ({"x": [1, None, 3], "y": [1, 2, 3]}, "/x/1"),
        ({"x": [1, 2, 3], "y": [1, float("nan"), 3]}, "/y/1"),
        ({"x": [1, 2, 3], "y": [1, 2, float("inf")]}, "/y/2"),
        ({"x": [1, 2, 3]}, "/y"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "z": [1, 2, 3]}, "/z"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "series": [1, 2, 3]}, "/series"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "series": ["a", None, "b"]}, "/series/1"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "series": ["a", "", "b"]}, "/series/1"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "series": ["a", " ", "b"]}, "/series/1"),
        ({"x": [1, 2, 3], "y": [1, 2, 3], "series": ["a", "\n", "b"]}, "/series/1"),
    ],
)
def test_a_bad_parquet_column_is_named(columns: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        parquet(columns)
    assert [one.pointer for one in raised.value.errors] == [pointer]


def test_more_rows_than_are_taken() -> None:
    with pytest.raises(TooLarge, match="1001 points; at most 1000"):
        parquet({"x": range(1001), "y": range(1001)})


def test_a_long_label_repeated_is_refused_before_it_is_unpacked() -> None:
    """40 MB of text a row, 1,000 times: a file of a few kilobytes that would fill 40 GB."""
    long = pa.DictionaryArray.from_arrays(pa.array([0] * 1000, pa.int32()), pa.array(["a" * 40_000_000]))
    buffer = io.BytesIO()
    pq.write_table(pa.table({"x": range(1000), "y": range(1000), "series": long}), buffer, compression="zstd")
    assert len(buffer.getvalue()) < 50_000
    for most in (1000, 10**9):
        with pytest.raises((TooLarge, InvalidInput)):
            read_parquet(buffer.getvalue(), most=most, subject="A", details={})


def test_a_repeated_label_of_a_file_with_points_enough_for_its_size() -> None:
    """With 200,000 rows the size that the file states is plausible; the label's length is not."""
    n = 200_000
    long = pa.DictionaryArray.from_arrays(pa.array([0] * n, pa.int32()), pa.array(["a" * 40_000_000]))
    buffer = io.BytesIO()
    pq.write_table(pa.table({"x": np.zeros(n), "y": np.zeros(n), "series": long}), buffer, compression="zstd")
    with pytest.raises(InvalidInput, match="no label of more than 200"):
        read_parquet(buffer.getvalue(), most=n, subject="A", details={})


@pytest.mark.parametrize("cut", [0, 4, 10, 100, -1, -8, -20])
def test_a_spoilt_file_is_malformed(cut: int) -> None:
    buffer = io.BytesIO()
    pq.write_table(pa.table({"x": [1.0, 2, 3], "y": [1.0, 2, 3]}), buffer)
    with pytest.raises(MalformedInput):
        read_parquet(buffer.getvalue()[:cut], most=10, subject="A", details={})


def test_a_file_with_any_byte_changed_is_read_or_refused() -> None:
    buffer = io.BytesIO()
    pq.write_table(pa.table({"x": [1.0, 2, 3], "y": [1.0, 2, 3], "series": ["a", "b", "a"]}), buffer)
    good = buffer.getvalue()
    for place in range(len(good)):
        for change in (0x01, 0x80, 0xFF):
            bad = good[:place] + bytes([good[place] ^ change]) + good[place + 1 :]
            try:
                read_parquet(bad, most=10, subject="A", details={})
            except (InvalidInput, TooLarge):
                pass
