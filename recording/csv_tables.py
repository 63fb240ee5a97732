"""CSV files as columns of numbers, or the line and column where they are none.

Decided here: separators (comma, semicolon, tab; told from the first line), decimal commas (only
where commas do not separate), what an empty cell looks like, lines of comment before the headings,
and how large a file may be. Apache Arrow parses the numbers; where it refuses, we look for the
cell ourselves, so that the complaint does not depend on its wording.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as arrow_csv
from numpy.typing import NDArray

from condyle.model.errors import RecordingError
from condyle.recording.c3d_layout import refusal
from condyle.recording.table_headings import LONGEST_SHOWN

FloatArray = NDArray[np.float64]

SEPARATORS = ",;\t"

EMPTY = ("", "nan", "NaN", "NAN", "NA", "null")
"""What a cell without a number holds; the empty one is what most programs write."""

LONGEST_LINE = 4 * 2**20
"""Bytes; ten thousand headings of 400 letters."""

MOST_COLUMNS = 30_000
"""Ten thousand markers: far more than any laboratory has, few enough to name and to hold."""

MOST_NUMBERS = 150_000_000
"""Cells of a table, 1.2 GB of numbers: 60 markers at 200 Hz for more than an hour."""

MOST_COMMENTS = 200
"""Lines that begin with ``#`` before the headings."""

SNIFFED = 200
"""Lines looked at for decimal commas."""

NUMBER = re.compile(
    r"\s*[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\s*|\s*[+-]?inf(inity)?\s*", re.IGNORECASE
)

DECIMAL_COMMA = re.compile(r"\s*[+-]?\d*,\d+([eE][+-]?\d+)?\s*")

UNIT_COMMENT = re.compile(r"#\s*units?\s*[:=]\s*(\S+)\s*", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class CsvTable:
    """A CSV file whose first line is understood.

    Attributes
    ----------
    path : Path
    headings : (columns,) str
    unit : str or None
        From a comment ``# units: mm`` before the headings.
    separator, decimal : str
    heading_line : int
        The headings' line, from 1.
    """

    path: Path
    headings: tuple[str, ...]
    unit: str | None
    separator: str
    decimal: str
    heading_line: int

    def read(self, columns: Sequence[int]) -> FloatArray:
        """(rows, columns) The numbers of some columns, NaN where a cell is empty.

        Raises
        ------
        RecordingError
            With line and column of the first cell that is no number, or of a line too short.
        """
        names = [str(column) for column in range(len(self.headings))]
        kept = [names[column] for column in columns]
        if next(self._lines(), None) is None:
            return np.empty((0, len(kept)))
        try:
            table = arrow_csv.read_csv(
                self.path,
                read_options=arrow_csv.ReadOptions(
                    column_names=names,
                    skip_rows=self.heading_line,
                    use_threads=False,
                    block_size=2 * LONGEST_LINE,
                ),
                parse_options=arrow_csv.ParseOptions(delimiter=self.separator),
                convert_options=arrow_csv.ConvertOptions(
                    column_types={name: pa.float64() for name in kept},
                    include_columns=kept,
                    null_values=list(EMPTY),
                    decimal_point=self.decimal,
                ),
            )
        except pa.ArrowInvalid as fault:
            raise self._fault(columns, str(fault)) from fault
        return table_numbers(table)

    def row_name(self, row: int) -> str:
        """Which line a row (from 0) stands on."""
        for index, (number, _) in enumerate(self._lines()):
            if index == row:
                return f"line {number}"
        return f"row {row + 1}"

    def _lines(self) -> Iterator[tuple[int, list[str]]]:
        """Number and cells of every line below the headings that is not empty."""
        with file_lines(self.path) as lines:
            for number, line in enumerate(lines, start=1):
                if number > self.heading_line and line:
                    yield number, split_line(line, self.separator)

    def _fault(self, columns: Sequence[int], why: str) -> RecordingError:
        """What is wrong with the first line that cannot be read."""
        wanted = len(self.headings)
        for number, cells in self._lines():
            if len(cells) != wanted:
                return refusal(
                    self.path,
                    f"line {number} has {len(cells)} cells where the headings have {wanted}",
                    "export or copy it again; decimal commas need semicolons between the cells",
                )
            for column in sorted(columns):
                text = cells[column]
                if text.strip() not in EMPTY and not self._is_number(text):
                    shown = text.strip()[:LONGEST_SHOWN]
                    return refusal(
                        self.path,
                        f"line {number}, column '{self.headings[column]}': "
                        f"{shown!r} is not a number",
                        "write a number, or leave the cell empty where the marker was not seen",
                    )
        return refusal(self.path, f"damaged CSV ({' '.join(why.split())[:200]})", "export it again")

    def _is_number(self, text: str) -> bool:
        if self.decimal == ",":
            if "." in text:
                return False
            text = text.replace(",", ".")
        return NUMBER.fullmatch(text) is not None


def table_numbers(table: pa.Table) -> FloatArray:
    """(rows, columns) An Arrow table of doubles, NaN where it holds nothing."""
    numbers = np.empty((table.num_rows, table.num_columns))
    for index, column in enumerate(table.columns):
        row = 0
        for chunk in (chunk for chunk in column.chunks if len(chunk)):
            # From its buffers: Arrow's own way to numpy fetches pandas, which takes a third of a second.
            there, values = chunk.buffers()
            here = slice(chunk.offset, chunk.offset + len(chunk))
            found = np.frombuffer(values, dtype=np.float64, count=here.stop)[here]
            if there is not None:
                bits = np.frombuffer(there, dtype=np.uint8)
                known = np.unpackbits(bits, count=here.stop, bitorder="little")[here]
                found = np.where(known, found, np.nan)
            numbers[row : row + len(chunk), index] = found
            row += len(chunk)
    return numbers


def open_csv(path: Path) -> CsvTable:
    """Read a CSV file's headings.

    Raises
    ------
    RecordingError
        Where it is empty, not text, or too large.
    """
    unit = None
    with file_lines(path) as lines:
        for number, line in enumerate(lines, start=1):
            check_text(line, path)
            if line.startswith("#") and number <= MOST_COMMENTS:
                declared = UNIT_COMMENT.fullmatch(line)
                unit = declared[1].lower() if declared else unit
            elif line.strip():
                break
        else:
            raise refusal(path, "it holds no headings", "export it again")
        separator = max(SEPARATORS, key=line.count)
        headings = tuple(split_line(line, separator))
        decimal = sniff_decimal(islice(lines, SNIFFED), separator)
    check_size(path, len(headings))
    return CsvTable(path, headings, unit, separator, decimal, number)


@contextmanager
def file_lines(path: Path) -> Iterator[Iterator[str]]:
    """The lines of a text file without their end; a very long one in pieces."""
    with path.open(encoding="utf-8-sig", errors="surrogateescape") as stream:
        yield (line.rstrip("\n") for line in iter(lambda: stream.readline(LONGEST_LINE), ""))


def check_text(line: str, path: Path) -> None:
    """Refuse headings that are no text in UTF-8."""
    if len(line) >= LONGEST_LINE:
        raise refusal(path, "its first line never ends", "give a table of markers")
    if "\0" in line or any("\udc80" <= letter <= "\udcff" for letter in line):
        raise refusal(path, "its headings are not text in UTF-8", "save it as CSV in UTF-8")


def split_line(line: str, separator: str) -> list[str]:
    """The cells of one line, quotes taken off."""
    try:
        return next(csv.reader([line], delimiter=separator), [])
    except csv.Error:
        return line.split(separator)


def check_size(path: Path, columns: int) -> None:
    """Refuse a table that would not fit in memory, before any of it is kept."""
    if columns > MOST_COLUMNS:
        raise refusal(path, f"it has {columns} columns", f"give at most {MOST_COLUMNS}")
    rows = 0
    with path.open("rb") as stream:
        while chunk := stream.read(LONGEST_LINE):
            rows += max(chunk.count(b"\n"), chunk.count(b"\r"))
    if rows * columns > MOST_NUMBERS:
        raise refusal(path, f"it has about {rows} lines of {columns} cells", "cut it into parts")


def sniff_decimal(lines: Iterable[str], separator: str) -> str:
    """``,`` where numbers are written so and commas do not separate, else ``.``."""
    if separator == ",":
        return "."
    cells = (cell for line in lines for cell in split_line(line, separator))
    return "," if any(DECIMAL_COMMA.fullmatch(cell) for cell in cells) else "."
