"""Parquet files as columns of numbers, their claims checked before anything is read.

Decided here: which Parquet files are tables of numbers, and how large one may be. The footer says
how many rows and bytes every column has; a file that claims more than it can hold is refused before
room is made for it. Standard: https://parquet.apache.org/docs/file-format/.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from condyle.model.errors import RecordingError
from condyle.recording.c3d_layout import refusal
from condyle.recording.csv_tables import MOST_COLUMNS, MOST_NUMBERS, table_numbers

FloatArray = NDArray[np.float64]

MAGIC = b"PAR1"
"""The first and the last four bytes of a Parquet file."""

MOST_FOOTER = 64 * 2**20
"""Bytes; a footer describes each column once per row group."""

MOST_PER_NUMBER, SPARE = 32, 2**16
"""Bytes: what a number may take, and a column chunk beside them (headers, dictionaries)."""

REMEDY = "export or copy it again"


@dataclass(frozen=True, slots=True)
class ParquetTable:
    """A Parquet file whose footer is sound.

    Attributes
    ----------
    path : Path
    headings : (columns,) str
    unit : str or None
        From the entry ``units`` of its metadata, or of a data frame's attributes in it.
    """

    path: Path
    headings: tuple[str, ...]
    unit: str | None

    def read(self, columns: Sequence[int]) -> FloatArray:
        """(rows, columns) The numbers of some columns, NaN where there is none.

        Raises
        ------
        RecordingError
            Where a column holds no numbers, or the file is damaged.
        """
        try:
            with open_file(self.path) as file:
                check_numbers(file, self.headings, columns, self.path)
                # by position: the library cuts a name at its dots
                stored = sorted(columns)
                table = file.reader.read_all(column_indices=stored, use_threads=False)
                place = {column: index for index, column in enumerate(stored)}
                table = table.select([place[column] for column in columns])
                floats = pa.schema([pa.field(str(i), pa.float64()) for i in range(len(columns))])
                table = table.rename_columns(floats.names).cast(floats, safe=False)
                return table_numbers(table)
        except (pa.ArrowException, OSError, ValueError, MemoryError) as fault:
            raise damaged(self.path, fault) from fault

    def row_name(self, row: int) -> str:
        """What to call a row (from 0)."""
        return f"row {row + 1}"


def open_parquet(path: Path) -> ParquetTable:
    """Read a Parquet file's footer.

    Raises
    ------
    RecordingError
        Where it is damaged, too large, or has no rows.
    """
    check_ends(path)
    try:
        with open_file(path) as file:
            schema = file.schema_arrow
            check_shape(file.metadata, path)
            return ParquetTable(path, tuple(schema.names), declared_unit(schema))
    except (pa.ArrowException, OSError, ValueError, MemoryError) as fault:
        raise damaged(path, fault) from fault


def open_file(path: Path) -> Any:
    """The library's reader, its own bounds tightened."""
    return pq.ParquetFile(
        path,
        thrift_string_size_limit=MOST_FOOTER,
        thrift_container_size_limit=1_000_000,
        page_checksum_verification=True,
    )


def check_ends(path: Path) -> None:
    """A Parquet file begins and ends with four letters, and says how long its footer is."""
    size = path.stat().st_size
    with path.open("rb") as stream:
        start = stream.read(4)
        stream.seek(max(size - 8, 0))
        end = stream.read(8)
    if start != MAGIC or size < 12 or end[4:] != MAGIC:
        raise refusal(path, "damaged Parquet, its end is missing", REMEDY)
    if int.from_bytes(end[:4], "little") > min(size - 12, MOST_FOOTER):
        raise refusal(path, "damaged Parquet, its footer is longer than the file", REMEDY)


def check_shape(metadata: Any, path: Path) -> None:
    """Refuse more rows and columns than a recording has."""
    rows, columns = metadata.num_rows, metadata.num_columns
    if columns > MOST_COLUMNS:
        raise refusal(path, f"it has {columns} columns", f"give at most {MOST_COLUMNS}")
    if rows < 0 or rows * max(columns, 1) > MOST_NUMBERS:
        raise refusal(path, f"it claims {rows} rows of {columns} columns", "cut it into parts")
    # Not further than this into the metadata: asked for a damaged column chunk, the library ends
    # the whole process (a C++ exception that nothing catches); its reader only refuses it.
    groups = [metadata.row_group(index) for index in range(metadata.num_row_groups)]
    if min((group.num_rows for group in groups), default=0) < 0:
        raise refusal(path, "damaged Parquet, a part with fewer than no rows", REMEDY)
    if sum(group.num_rows for group in groups) != rows:
        raise refusal(path, "damaged Parquet, its parts do not add up to its rows", REMEDY)
    claimed = sum(group.total_byte_size for group in groups)
    if claimed > columns * (SPARE * max(len(groups), 1) + MOST_PER_NUMBER * rows):
        raise refusal(path, f"damaged Parquet, it claims {claimed} bytes of numbers", REMEDY)


def check_numbers(file: Any, headings: Sequence[str], columns: Sequence[int], path: Path) -> None:
    """The columns of a recording hold plain numbers."""
    schema = file.schema_arrow
    if len(schema.names) != file.metadata.num_columns:
        raise refusal(path, "it has columns inside columns", "write one plain column a number")
    for column in columns:
        kind = schema.field(column).type
        if not (pa.types.is_floating(kind) or pa.types.is_integer(kind) or pa.types.is_null(kind)):
            problem = f"column '{headings[column]}' holds {kind}, not numbers"
            raise refusal(path, problem, "write its numbers as numbers")


def declared_unit(schema: Any) -> str | None:
    """The unit of length in the file's own metadata, where it has one."""
    metadata = dict(schema.metadata or {})
    found = metadata.get(b"units") or metadata.get(b"unit")
    if found is None and b"pandas" in metadata:
        try:
            told = json.loads(metadata[b"pandas"])
            attributes = told.get("attributes") or {}
            found = attributes.get("units") or attributes.get("unit")
        except (ValueError, AttributeError, RecursionError):
            return None
    if isinstance(found, bytes):
        found = found.decode("utf-8", "replace")
    return found.strip().lower() if isinstance(found, str) and found.strip() else None


def damaged(path: Path, fault: BaseException) -> RecordingError:
    """What the library said, in one line."""
    if isinstance(fault, MemoryError):
        return refusal(path, "it does not fit in memory", "cut it into shorter ones")
    why = " ".join(str(fault).split())[:200] or type(fault).__name__
    return refusal(path, f"damaged Parquet ({why})", REMEDY)
