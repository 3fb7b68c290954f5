"""Tables read back to what was written, and the same table gives the same bytes."""

import csv
import io
import math
import struct
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from waveassay.contract.errors import MachineError
from waveassay.provenance.tables import (
    Column,
    concat_to_csv,
    csv_lines,
    parquet_writer,
    table_of,
    write_csv,
    write_csv_lines,
    write_parquet,
    write_short_csv,
)

COLUMNS = [
    Column("recording", "text"),
    Column("band_power.alpha", "number"),
    Column("epoch", "count"),
    Column("kept", "flag"),
]
TEXT = st.text(st.characters(exclude_categories=["Cs"]))
NUMBER = st.floats() | st.floats(-1e-307, 1e-307, allow_subnormal=True) | st.none()
ROWS = st.lists(
    st.tuples(
        TEXT | st.none(),
        NUMBER,
        st.integers(-(2**63), 2**63 - 1) | st.none(),
        st.booleans() | st.none(),
    ),
    max_size=20,
)
# The folder of a test is made once for all of hypothesis's examples; each writes its files anew.
in_one_folder = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)


def bits(value: float | None) -> bytes | None:
    return None if value is None or math.isnan(value) else struct.pack("<d", value)


def cells_of(path: Path) -> list[list[str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.reader(file, strict=True))


@in_one_folder
@given(rows=ROWS)
def test_csv_reads_back_cell_by_cell(tmp_path: Path, rows: list[tuple[Any, ...]]) -> None:
    path = tmp_path / "t.csv"
    write_csv(path, COLUMNS, rows)
    header, *cells = cells_of(path)
    assert header == [column.name for column in COLUMNS]
    assert len(cells) == len(rows)
    for (text, number, count, flag), row in zip(rows, cells, strict=True):
        assert row[0] == (text or "")
        assert bits(float(row[1]) if row[1] else None) == bits(number)
        assert (int(row[2]) if row[2] else None) == count
        assert row[3] == {True: "true", False: "false", None: ""}[flag]


@in_one_folder
@given(rows=ROWS)
def test_another_reader_sees_the_same(tmp_path: Path, rows: list[tuple[Any, ...]]) -> None:
    path = tmp_path / "t.csv"
    write_csv(path, COLUMNS, rows)
    types = {
        "recording": pa.string(),
        "band_power.alpha": pa.float64(),
        "epoch": pa.int64(),
        "kept": pa.bool_(),
    }
    table = pyarrow.csv.read_csv(
        path,
        parse_options=pyarrow.csv.ParseOptions(newlines_in_values=True),
        convert_options=pyarrow.csv.ConvertOptions(
            column_types=types, null_values=[""], true_values=["true"], false_values=["false"]
        ),
    )
    read = table.to_pydict()
    assert read["recording"] == [row[0] or "" for row in rows]
    assert [bits(v) for v in read["band_power.alpha"]] == [bits(row[1]) for row in rows]
    assert read["epoch"] == [row[2] for row in rows]
    assert read["kept"] == [row[3] for row in rows]


@in_one_folder
@given(parts=st.lists(st.lists(st.tuples(TEXT, TEXT)), max_size=4))
def test_lines_of_text_are_those_of_a_table(
    tmp_path: Path, parts: list[list[tuple[str, str]]]
) -> None:
    columns = [Column("step", "text"), Column("value", "text")]
    write_csv(tmp_path / "t.csv", columns, [row for part in parts for row in part])
    write_csv_lines(tmp_path / "lines.csv", columns, map(csv_lines, parts))
    assert (tmp_path / "lines.csv").read_bytes() == (tmp_path / "t.csv").read_bytes()


@in_one_folder
@given(value=st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_is_the_shortest_text_of_its_float(tmp_path: Path, value: float) -> None:
    path = tmp_path / "t.csv"
    write_csv(path, [Column("x", "number")], [[value]])
    text = path.read_text().splitlines()[1]
    assert bits(float(text)) == bits(value)

    def digits(text: str) -> str:
        return text.lower().split("e")[0].replace(".", "").strip("-0")

    # Python's own text is the shortest that reads back (documentation of repr for floats).
    assert len(digits(text)) <= len(digits(repr(value)))


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (4.0, "4"),
        (0.1, "0.1"),
        (-0.0, "-0"),
        (5e-324, "5e-324"),
        (1.7976931348623157e308, "1.7976931348623157e+308"),
        (math.inf, "inf"),
        (-math.inf, "-inf"),
        (1 / 3, "0.3333333333333333"),
    ],
)
def test_numbers_as_they_are_written(tmp_path: Path, value: float, text: str) -> None:
    write_csv(tmp_path / "t.csv", [Column("x", "number"), Column("y", "count")], [[value, 1]])
    assert (tmp_path / "t.csv").read_text() == f"x,y\n{text},1\n"


def test_quotes_stand_only_where_needed(tmp_path: Path) -> None:
    texts = ["plain", " spaced ", "semi;colon", "µV", "=1+1", "a,b", 'say "a"', "a\nb", "a\rb", ""]
    write_csv(
        tmp_path / "t.csv", [Column("a", "text"), Column("b", "text")], [[t, "x"] for t in texts]
    )
    content = (tmp_path / "t.csv").read_bytes().decode()
    assert content == (
        "a,b\nplain,x\n spaced ,x\nsemi;colon,x\nµV,x\n=1+1,x\n"
        '"a,b",x\n"say ""a""",x\n"a\nb",x\n"a\rb",x\n,x\n'
    )


def test_a_header_is_quoted_where_needed(tmp_path: Path) -> None:
    write_csv(tmp_path / "t.csv", [Column('a,"b"', "text"), Column("c", "text")], [])
    assert (tmp_path / "t.csv").read_text() == '"a,""b""",c\n'


@pytest.mark.parametrize("kind", ["text", "number"])
def test_a_lone_missing_cell_is_still_a_row(tmp_path: Path, kind: Any) -> None:
    write_csv(tmp_path / "t.csv", [Column("a", kind)], [[None], [None]])
    assert cells_of(tmp_path / "t.csv") == [["a"], [""], [""]]


def test_a_name_that_is_not_utf8_is_written_as_its_escape(tmp_path: Path) -> None:
    name = b"p\xe903".decode("utf-8", "surrogateescape")
    write_csv(tmp_path / "t.csv", [Column("path", "text")], [[name], ["fine"], [None]])
    assert cells_of(tmp_path / "t.csv")[1:] == [["p\\udce903"], ["fine"], [""]]


def test_columns_keep_the_order_asked_for(tmp_path: Path) -> None:
    table = pa.table({"b": ["x"], "a": [1.5]})
    write_csv(tmp_path / "t.csv", [Column("a", "number"), Column("b", "text")], table)
    assert (tmp_path / "t.csv").read_text() == "a,b\n1.5,x\n"


def big(count: int) -> tuple[list[Column], dict[str, Any]]:
    random = np.random.default_rng(3)
    numbers = random.standard_normal(count)
    numbers[::7] = np.nan
    columns = [
        Column("r", "text"),
        Column("x", "number"),
        Column("n", "count"),
        Column("k", "flag"),
    ]
    texts = [f'site{i % 5}, "p{i % 11}"' for i in range(count)]
    data = {"r": texts, "x": numbers, "n": np.arange(count), "k": numbers > 0}
    return columns, data


def test_rows_and_arrays_and_chunks_give_the_same_bytes(tmp_path: Path) -> None:
    columns, data = big(20_000)
    table = table_of(columns, data)
    rows = [
        (r, x, n, k)
        for r, x, n, k in zip(
            data["r"], data["x"].tolist(), data["n"].tolist(), data["k"].tolist(), strict=True
        )
    ]
    in_chunks = pa.concat_tables([table.slice(0, 7), table.slice(7, 9000), table.slice(9007)])
    assert in_chunks.column("x").num_chunks == 3
    bytes_csv, bytes_parquet = set(), set()
    for given_rows in (data, rows, table, in_chunks):
        write_csv(tmp_path / "t.csv", columns, given_rows)
        bytes_csv.add((tmp_path / "t.csv").read_bytes())
    marked = in_chunks.replace_schema_metadata({"made": "elsewhere"})
    for given_table in (table, table_of(columns, rows), in_chunks, marked):
        write_parquet(tmp_path / "t.parquet", given_table)
        bytes_parquet.add((tmp_path / "t.parquet").read_bytes())
    assert len(bytes_csv) == 1
    assert len(bytes_parquet) == 1


def test_chunks_leave_no_trace_in_parquet_where_pages_are_full(tmp_path: Path) -> None:
    columns, data = big(300_000)
    # Texts that are all different fill pages and outgrow the dictionary.
    data["r"] = [f"an annotation of some length, number {i}" for i in range(300_000)]
    table = table_of(columns, data)
    in_chunks = pa.concat_tables([table.slice(0, 7), table.slice(7, 140_001), table.slice(140_008)])
    for name, given_table in (("a", table), ("b", in_chunks)):
        write_parquet(tmp_path / name, given_table)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


WRITER = """
import sys
from pathlib import Path
from waveassay.provenance.tables import Column, table_of, write_parquet
columns = [Column("a", "text"), Column("x", "number")]
write_parquet(Path(sys.argv[1]), table_of(columns, [(f"r{i % 3}", i / 7) for i in range(5000)]))
"""


def test_a_table_added_in_pieces_is_the_same_file(tmp_path: Path) -> None:
    count = 300_000  # more than two row groups
    table = table_of(
        [Column("name", "text"), Column("value", "number")],
        {"name": [f"s{i // 1000}" for i in range(count)], "value": np.arange(count) * 0.1},
    )
    write_parquet(tmp_path / "whole.parquet", table)
    with parquet_writer(tmp_path / "pieces.parquet", table.schema) as write:
        for start, stop in ((0, 7), (7, 100_000), (100_000, 100_000), (100_000, count)):
            write(table.slice(start, stop - start))
    whole, pieces = (tmp_path / f"{name}.parquet" for name in ("whole", "pieces"))
    assert pieces.read_bytes() == whole.read_bytes()
    assert pyarrow.parquet.read_table(whole).equals(table)


def test_another_process_writes_the_same_parquet_bytes(tmp_path: Path) -> None:
    columns = [Column("a", "text"), Column("x", "number")]
    table = table_of(columns, [(f"r{i % 3}", i / 7) for i in range(5000)])
    write_parquet(tmp_path / "here", table)
    subprocess.run([sys.executable, "-c", WRITER, str(tmp_path / "there")], check=True)
    assert (tmp_path / "here").read_bytes() == (tmp_path / "there").read_bytes()


@in_one_folder
@given(rows=ROWS)
def test_parquet_reads_back_cell_by_cell(tmp_path: Path, rows: list[tuple[Any, ...]]) -> None:
    path = tmp_path / "t.parquet"
    table = table_of(COLUMNS, rows)
    write_parquet(path, table)
    read = pyarrow.parquet.read_table(path)
    assert read.schema.equals(table.schema)
    found = read.to_pydict()
    for i, column in enumerate(COLUMNS):
        expected: Sequence[Any] = [row[i] for row in rows]
        if column.type == "number":
            assert [bits(v) for v in found[column.name]] == [bits(v) for v in expected]
        else:
            assert found[column.name] == expected


def test_not_a_number_is_missing_in_parquet(tmp_path: Path) -> None:
    write_parquet(tmp_path / "t.parquet", pa.table({"x": [1.0, math.nan, None]}))
    assert pyarrow.parquet.read_table(tmp_path / "t.parquet").column("x").to_pylist() == [
        1.0,
        None,
        None,
    ]


def test_dictionaries_are_for_text_only(tmp_path: Path) -> None:
    columns, data = big(1000)
    write_parquet(tmp_path / "t.parquet", table_of(columns, data))
    group = pyarrow.parquet.ParquetFile(tmp_path / "t.parquet").metadata.row_group(0)
    for i, column in enumerate(columns):
        assert group.column(i).compression == "ZSTD"
        assert group.column(i).has_dictionary_page == (column.type == "text")


def test_many_parquet_files_become_the_csv_of_all_rows(tmp_path: Path) -> None:
    columns, data = big(30_000)
    table = table_of(columns, data)
    paths = []
    for i, (start, count) in enumerate([(0, 10), (10, 0), (10, 20_000), (20_010, 9_990)]):
        paths.append(tmp_path / f"{i}.parquet")
        write_parquet(paths[-1], table.slice(start, count))
    concat_to_csv(paths, tmp_path / "all.csv")
    write_csv(tmp_path / "whole.csv", columns, table)
    assert (tmp_path / "all.csv").read_bytes() == (tmp_path / "whole.csv").read_bytes()


def test_short_files_can_be_joined_as_text_with_the_same_bytes(tmp_path: Path) -> None:
    columns, data = big(30_000)
    table = table_of(columns, data)
    parts = []
    for i, (start, count) in enumerate([(0, 10), (10, 0), (10, 20_000), (20_010, 9_990 - 5_000)]):
        part = table.slice(start, count)
        path = tmp_path / f"{i}.parquet"
        write_parquet(path, part)
        if count < 8_192:
            path = path.with_suffix(".csv")
            write_short_csv(path, table.schema, [part.slice(0, 7), part.slice(7)])
        parts.append(path)
    concat_to_csv(parts, tmp_path / "all.csv")
    write_csv(tmp_path / "whole.csv", columns, table.slice(0, 25_000))
    assert (tmp_path / "all.csv").read_bytes() == (tmp_path / "whole.csv").read_bytes()


def test_short_files_with_other_columns_are_refused_by_name(tmp_path: Path) -> None:
    for name in ("a", "b"):
        table = pa.table({name: [1.0]})
        write_parquet(tmp_path / f"{name}.parquet", table)
        write_short_csv(tmp_path / f"{name}.csv", table.schema, [table])
    for first, second in (("a.csv", "b.parquet"), ("a.parquet", "b.csv"), ("a.csv", "b.csv")):
        with pytest.raises(ValueError, match=second.replace(".", r"\.")):
            concat_to_csv([tmp_path / first, tmp_path / second], tmp_path / "t.csv")
    assert not (tmp_path / "t.csv").exists()


MEMORY = """
import resource, sys
from pathlib import Path
from waveassay.provenance.tables import concat_to_csv
def peak():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
source, target = Path(sys.argv[1]), Path(sys.argv[2])
concat_to_csv([source] * 2, target)
before = peak()
concat_to_csv([source] * 20, target)
print(peak() - before)
"""


@pytest.mark.skipif(sys.platform != "linux", reason="the unit of ru_maxrss is Linux's")
def test_memory_does_not_grow_with_the_number_of_files(tmp_path: Path) -> None:
    columns, data = big(100_000)
    write_parquet(tmp_path / "t.parquet", table_of(columns, data))
    command = [sys.executable, "-c", MEMORY, str(tmp_path / "t.parquet"), str(tmp_path / "t.csv")]
    grown_kb = int(subprocess.run(command, capture_output=True, check=True).stdout)
    written_kb = (tmp_path / "t.csv").stat().st_size // 1024
    assert written_kb > 60_000
    assert grown_kb < 16_000


def test_no_parquet_files_at_all(tmp_path: Path) -> None:
    concat_to_csv([], tmp_path / "t.csv", COLUMNS)
    assert (tmp_path / "t.csv").read_text() == "recording,band_power.alpha,epoch,kept\n"


def test_parquet_files_with_other_columns_are_refused_by_name(tmp_path: Path) -> None:
    write_parquet(tmp_path / "a.parquet", pa.table({"x": [1.0]}))
    write_parquet(tmp_path / "b.parquet", pa.table({"y": [1.0]}))
    write_parquet(tmp_path / "c.parquet", pa.table({"x": ["text"]}))
    for other in ("b.parquet", "c.parquet"):
        with pytest.raises(ValueError, match=other.replace(".", r"\.")):
            concat_to_csv([tmp_path / "a.parquet", tmp_path / other], tmp_path / "t.csv")
    assert not (tmp_path / "t.csv").exists()


@pytest.mark.parametrize(
    ("kind", "cell"),
    [
        ("text", 5),
        ("text", True),
        ("text", b"x"),
        ("number", "1"),
        ("number", True),
        ("number", 10**400),
        ("count", 3.0),
        ("count", 3.5),
        ("count", True),
        ("count", 2**63),
        ("flag", 1),
        ("flag", "true"),
    ],
)
def test_a_cell_of_another_type_is_refused_and_its_column_named(kind: Any, cell: object) -> None:
    with pytest.raises(ValueError, match=r"column power\.alpha"):
        table_of([Column("power.alpha", kind)], [[None], [cell]])


def test_whole_numbers_are_numbers_too() -> None:
    table = table_of([Column("x", "number")], [[1], [2.5], [None]])
    assert table.column("x").to_pylist() == [1.0, 2.5, None]


def test_rows_and_columns_must_fit() -> None:
    two = [Column("a", "text"), Column("b", "text")]
    with pytest.raises(ValueError, match="row 1 has 1 cells for 2 columns"):
        table_of(two, [["x", "y"], ["x"]])
    with pytest.raises(ValueError, match="columns"):
        table_of(two, {"a": ["x"]})
    with pytest.raises(ValueError, match="columns"):
        table_of(two, pa.table({"a": ["x"], "c": ["y"]}).to_pydict())
    with pytest.raises(ValueError, match="distinct"):
        table_of([Column("a", "text")] * 2, [])


def test_an_unwritable_place_is_told_plainly(tmp_path: Path) -> None:
    (tmp_path / "runs").write_text("")
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        write_parquet(tmp_path / "runs" / "t.parquet", pa.table({"x": [1.0]}))
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        write_csv(tmp_path / "runs" / "t.csv", [Column("x", "number")], [])


def test_the_csv_module_would_write_the_same_text_cells(tmp_path: Path) -> None:
    # No lone carriage return: older versions of the module leave one unquoted.
    rows = [(text, text) for text in ("a", "b,c", 'd"e', "f\ng", "é", "h\r\ni")]
    write_csv(tmp_path / "t.csv", [Column("a", "text"), Column("b", "text")], rows)
    expected = io.StringIO()
    csv.writer(expected, lineterminator="\n").writerows([("a", "b"), *rows])
    assert (tmp_path / "t.csv").read_bytes() == expected.getvalue().encode()
