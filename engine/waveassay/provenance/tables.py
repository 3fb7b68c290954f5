"""Tables as files: CSV for people, Parquet for many rows; the same table, the same bytes."""

import re
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Literal

from waveassay.provenance.files import write_beside

#: Text; a float (missing: NaN or None); a whole number; true or false.
ColumnType = Literal["text", "number", "count", "flag"]

#: A table of no more rows may be written as CSV when it is made, see `write_short_csv`.
SHORT_ROWS = 8_192

# Rows in one group of a Parquet file, and rows turned into CSV at once: what bounds the memory.
_GROUP_ROWS = 131_072
_BATCH_ROWS = 8_192
# What is quoted in CSV.
_SPECIAL = re.compile('[",\r\n]')


@dataclass(frozen=True)
class Column:
    """A column of a table."""

    name: str
    type: ColumnType


def table_of(
    columns: Sequence[Column], data: Iterable[Sequence[object]] | Mapping[str, Any]
) -> Any:
    """Return a pyarrow Table, from rows of cells or from one array a column.

    None in any column, and NaN in a number, is a missing cell.

    Raises
    ------
    ValueError
        When a row has another number of cells, a column is lacking or not asked for, or a cell is
        not of its column's type; the column is named.
    """
    import pyarrow as pa

    names = [column.name for column in columns]
    if not names or len(set(names)) != len(names):
        raise ValueError(f"a table has columns with distinct names (got {names})")
    if not isinstance(data, Mapping):
        rows = list(data)
        wrong = next((i for i, row in enumerate(rows) if len(row) != len(names)), None)
        if wrong is not None:
            raise ValueError(f"row {wrong} has {len(rows[wrong])} cells for {len(names)} columns")
        data = dict(zip(names, zip(*rows, strict=True) if rows else [()] * len(names), strict=True))
    if set(data) != set(names):
        raise ValueError(f"the columns are {names}, but there are data for {list(data)}")
    arrays = [_array(column, data[column.name]) for column in columns]
    return pa.Table.from_arrays(arrays, names=names)


def write_csv(path: Path, columns: Sequence[Column], rows: Any) -> None:
    r"""Write a table as CSV (RFC 4180): UTF-8, a header, ``\n`` line ends, quotes where needed.

    A number is the shortest text that reads back to the same float (``4``, ``0.1``, ``1e-7``,
    ``-0``, ``inf``); a missing one an empty cell. Flags are ``true`` and ``false``. A missing text
    and an empty one are both an empty cell.

    Text is written as it is. One that begins with ``=``, ``+``, ``-`` or ``@`` (an annotation may)
    is taken for a formula by spreadsheet programs when they open the file rather than import it
    as text; a guard would change the data for every other reader.

    Parameters
    ----------
    rows : a pyarrow Table with these columns in any order, or what `table_of` takes.

    Raises
    ------
    ValueError
        As `table_of`, or when the table has other columns.
    MachineError
        When the disk or a permission declines.
    """
    table = _as_table(columns, rows)
    with write_beside(path) as file:
        file.write(_header(table.column_names))
        _write_rows(file, table.to_batches(max_chunksize=_BATCH_ROWS))


def write_parquet(path: Path, table: Any) -> None:
    """Write a pyarrow Table as Parquet, as `parquet_writer` does.

    Raises
    ------
    MachineError
        When the disk or a permission declines.
    """
    with parquet_writer(path, table.schema) as write:
        write(table)


@contextmanager
def parquet_writer(path: Path, schema: Any) -> Iterator[Callable[[Any], None]]:
    """Give a function that adds a pyarrow Table to a Parquet file; equal rows give equal bytes.

    Zstandard, dictionaries for text only, row groups of 131,072; NaN is written as missing. How
    the rows are cut into tables, and their metadata, leave no trace. The bytes hold the version of
    the pyarrow that wrote them. No more than a row group is held. The file is not synced to the
    disk: the store, which it is for, checks its files when they are read.

    Raises
    ------
    MachineError
        When the disk or a permission declines.
    """
    import pyarrow as pa

    plain = schema.remove_metadata()
    text = [field.name for field in plain if pa.types.is_string(field.type)]
    waiting: list[Any] = []

    with (
        write_beside(path, sync=False) as file,
        _parquet().ParquetWriter(
            file,
            plain,
            compression="zstd",
            use_dictionary=text,
            store_schema=False,
            version="2.6",
            data_page_version="1.0",
        ) as writer,
    ):

        def write_groups(least: int) -> None:
            while waiting and sum(table.num_rows for table in waiting) >= least:
                whole = pa.concat_tables(waiting)
                writer.write_table(
                    whole.slice(0, _GROUP_ROWS).combine_chunks(), row_group_size=_GROUP_ROWS
                )
                waiting[:] = [whole.slice(_GROUP_ROWS)] if whole.num_rows > _GROUP_ROWS else []

        def write(table: Any) -> None:
            arrays = [_without_nan(column) for column in table.columns]
            if table.num_rows:
                waiting.append(pa.Table.from_arrays(arrays, schema=plain))
            write_groups(_GROUP_ROWS)

        yield write
        write_groups(0)


def write_short_csv(path: Path, schema: Any, tables: Sequence[Any]) -> None:
    """Write the rows of pyarrow Tables as one CSV, with the bytes that `concat_to_csv` would write.

    Of thousands of short files, most of the time to join them would go into opening each as
    Parquet. Like a Parquet file it is not synced to the disk.

    Raises
    ------
    MachineError
        When the disk or a permission declines.
    """
    import pyarrow as pa

    whole = pa.concat_tables([schema.empty_table(), *tables]).combine_chunks()
    with write_beside(path, sync=False) as file:
        file.write(_header(schema.names))
        _write_rows(file, whole.to_batches())


def csv_lines(rows: Iterable[Sequence[str]]) -> str:
    """Return rows of texts as lines of CSV, as `write_csv` writes them, without a header.

    A row has more than one cell.
    """
    return "".join(f"{','.join(map(_quoted, row))}\n" for row in rows)


def write_csv_lines(path: Path, columns: Sequence[Column], parts: Iterable[str]) -> None:
    """Write lines that `csv_lines` gave, for columns of text, one part after another.

    Raises
    ------
    MachineError
        When the disk or a permission declines.
    """
    with write_beside(path) as file:
        file.write(_header([column.name for column in columns]))
        file.write("".join(parts).encode("utf-8", "backslashreplace"))


def concat_to_csv(
    paths: Iterable[str | Path], csv_path: Path, columns: Sequence[Column] = ()
) -> None:
    """Write the rows of Parquet files, one after another, as one CSV.

    A batch of rows is held at a time, whatever the files' size.

    Parameters
    ----------
    paths : Parquet files; in the place of any, the CSV that `write_short_csv` made of it.
    columns : for the header, where there may be no file at all.

    Raises
    ------
    ValueError
        When a file has other columns than the first.
    MachineError
        When the disk or a permission declines.
    """
    pq = _parquet()

    header = _header([column.name for column in columns]) if columns else b""
    schema = None
    with write_beside(csv_path) as target:
        target.write(header)
        for path in paths:
            if str(path).endswith(".csv"):
                with open(path, "rb", buffering=0) as short:
                    text = short.read()
                begun = text.index(b"\n") + 1
                header = _same_header(target, header, text[:begun], path)
                target.write(memoryview(text)[begun:])
                continue
            with pq.ParquetFile(path, memory_map=False) as source:
                found = source.schema_arrow.remove_metadata()
                header = _same_header(target, header, _header(found.names), path)
                if schema is not None and found != schema:
                    raise ValueError(f"{path}: has the columns {found}, the others {schema}")
                schema = found
                _write_rows(target, source.iter_batches(batch_size=_BATCH_ROWS))


def _same_header(target: BinaryIO, header: bytes, own: bytes, path: str | Path) -> bytes:
    """Write the first file's header; refuse a file that has another."""
    if not header:
        target.write(own)
    elif own != header:
        raise ValueError(f"{path}: has the columns {own!r}, the others {header!r}")
    return own


def _compute() -> Any:
    import pyarrow.compute

    return pyarrow.compute


def _parquet() -> Any:
    import pyarrow.parquet

    return pyarrow.parquet


def _as_table(columns: Sequence[Column], rows: Any) -> Any:
    import pyarrow as pa

    if not isinstance(rows, pa.Table):
        return table_of(columns, rows)
    return table_of(columns, {name: rows.column(name) for name in rows.column_names})


def _array(column: Column, cells: Any) -> Any:
    """Return one column as an arrow array of its type; nothing is turned into another type."""
    import pyarrow as pa
    import pyarrow.types as kinds

    # The type to hold it in, and those that may be given for it.
    wanted, accepted = {
        "text": (pa.string(), (kinds.is_string, kinds.is_large_string)),
        "number": (pa.float64(), (kinds.is_floating, kinds.is_integer)),
        "count": (pa.int64(), (kinds.is_integer,)),
        "flag": (pa.bool_(), (kinds.is_boolean,)),
    }[column.type]
    try:
        if not isinstance(cells, pa.ChunkedArray | pa.Array):
            try:
                cells = pa.array(cells)
            except UnicodeEncodeError:  # a file name that is not UTF-8
                cells = pa.array([_sound(cell) for cell in cells])
        if not (kinds.is_null(cells.type) or any(accepts(cells.type) for accepts in accepted)):
            raise ValueError(f"it is to hold {column.type}, but the cells are {cells.type}")
        return _without_nan(cells.cast(wanted))
    except (pa.ArrowException, ValueError, TypeError, OverflowError) as error:
        raise ValueError(f"column {column.name}: {error}") from error


def _quoted(cell: str) -> str:
    if _SPECIAL.search(cell) is None:
        return cell
    return '"' + cell.replace('"', '""') + '"'


def _sound(cell: Any) -> Any:
    if isinstance(cell, str):
        return cell.encode("utf-8", "backslashreplace").decode("utf-8")
    return cell


def _without_nan(array: Any) -> Any:
    """Turn NaN into missing: one way to say it, and one bit pattern on disk."""
    import pyarrow as pa

    if not pa.types.is_floating(array.type):
        return array
    pc = _compute()
    nan = pc.is_nan(array)
    return pc.if_else(nan, None, array) if pc.any(nan).as_py() else array


def _header(names: Sequence[str]) -> bytes:
    import pyarrow as pa

    cells = [pa.array([name], pa.string()) for name in names]
    return bytes(_lines(cells))


def _write_rows(file: BinaryIO, batches: Iterable[Any]) -> None:
    for batch in batches:
        if batch.num_rows:
            file.write(_lines(batch.columns))


def _lines(columns: Sequence[Any]) -> memoryview:
    """Return the CSV text of columns of equal length."""
    import numpy as np

    pc = _compute()

    cells = [_cells(column) for column in columns]
    if len(cells) == 1:  # an empty cell alone would be an empty line, which readers pass over
        cells = [pc.if_else(pc.equal(pc.fill_null(cells[0], ""), ""), '""', cells[0])]
    missing = {"null_handling": "replace", "null_replacement": ""}
    last = pc.binary_join_element_wise(cells[-1], "\n", "", **missing)
    lines = pc.binary_join_element_wise(*cells[:-1], last, ",", **missing)
    # The array's own memory is the text: line after line, without a gap.
    _, offsets, text = lines.buffers()
    ends = np.frombuffer(offsets, np.int32)[lines.offset : lines.offset + len(lines) + 1]
    return memoryview(text)[ends[0] : ends[-1]]


def _cells(array: Any) -> Any:
    """Return a column as the text of its cells, quoted where they need it."""
    import pyarrow as pa

    pc = _compute()

    if not pa.types.is_string(array.type):
        return _without_nan(array).cast(pa.string())
    special = pc.match_substring_regex(array, _SPECIAL.pattern)
    if not pc.any(special).as_py():
        return array
    doubled = pc.replace_substring(array, '"', '""')
    return pc.if_else(special, pc.binary_join_element_wise('"', doubled, '"', ""), array)
