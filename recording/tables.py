"""Wide tables, CSV or Parquet, to `Recording`: one row a frame, ``NAME.x/.y/.z`` a marker.

Decided here: which unit of length a table is in, and that a marker is missing wherever one of its
three cells is. Headings, the clock and the two formats have files of their own.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.recording.c3d_layout import refusal
from condyle.recording.csv_tables import CsvTable, open_csv
from condyle.recording.parquet_tables import MAGIC, ParquetTable, open_parquet
from condyle.recording.point_names import listing, name_points
from condyle.recording.recording import Recording
from condyle.recording.table_clock import read_clock
from condyle.recording.table_headings import read_headings
from condyle.recording.units import (
    METRES_PER_UNIT,
    check_unit,
    marker_spread,
    unit_from_spread,
    unlikely_spread,
)

FloatArray = NDArray[np.float64]

TABLE_SUFFIXES = (".csv", ".tsv", ".txt", ".parquet")

MOST_COORDINATE = 1e9
"""Of any unit; a position beyond it is a fault of the file, and its square might overflow."""


def read_table(path: Path, *, units: str | None = None) -> Recording:
    """Read a wide table into metres and seconds, NaN where a marker is missing.

    Parameters
    ----------
    path : Path
        CSV (commas, semicolons or tabs) or Parquet, told by its content. Columns: ``time`` in
        seconds, ``NAME.x``, ``NAME.y``, ``NAME.z``, and ``frame`` where the file numbers them.
    units : str, optional
        The unit of length (``mm``, ``cm``, ``dm``, ``m``); else what the table declares in its
        headings or metadata, else told from the spread of the markers, which is then said.

    Raises
    ------
    RecordingError
        Where it is not such a table; the message names the line and the column.
    """
    check_unit(units)
    path = Path(path)
    table = open_table(path)
    headings = read_headings(table.headings, path)
    clock_columns = [headings.time] + ([] if headings.frame is None else [headings.frame])
    numbers = table.read([*headings.columns, *clock_columns])
    if not len(numbers):
        raise refusal(path, "it has headings but no frames", "export the recording again")
    markers = len(headings.columns)
    frame = None if headings.frame is None else numbers[:, markers + 1]
    clock = read_clock(numbers[:, markers], frame, path, table.row_name)
    remarks = list(clock.remarks)
    positions = read_positions(numbers[:, :markers], remarks)
    named = name_points(headings.labels, np.isfinite(positions[..., 0]))
    remarks += named.remarks
    positions = positions[:, named.columns]
    declared = headings.unit or table.unit
    unit = choose_unit(units, declared, marker_spread(positions), remarks)
    if headings.others:
        remarks.append(f"Columns without a meaning here were left out: {listing(headings.others)}.")
    shape = positions.shape[:2]
    return Recording(
        name=path.stem,
        source=str(path),
        rate=clock.rate,
        first_frame=clock.first_frame,
        labels=named.labels,
        positions=positions * METRES_PER_UNIT[unit],
        residuals=np.full(shape, np.nan),
        cameras=np.zeros(shape, dtype=np.int64),
        units=unit,
        remarks=tuple(remarks),
    )


def open_table(path: Path) -> CsvTable | ParquetTable:
    """The table in whichever of the two formats its first bytes tell."""
    with path.open("rb") as stream:
        start = stream.read(len(MAGIC))
    if not start:
        raise refusal(path, "the file is empty", "export or copy the recording again")
    if start == MAGIC:
        return open_parquet(path)
    if path.suffix.lower() == ".parquet":
        raise refusal(path, "this is not a Parquet file", "export or copy the recording again")
    return open_csv(path)


def read_positions(numbers: FloatArray, remarks: list[str]) -> FloatArray:
    """(frames, markers, 3) in the file's unit; a marker is whole or missing."""
    positions = np.array(numbers.reshape(len(numbers), -1, 3))
    with np.errstate(invalid="ignore"):
        sound = np.abs(positions) <= MOST_COORDINATE
    senseless = int((~sound & ~np.isnan(positions)).any(axis=2).sum())
    if senseless:
        remarks.append(
            f"{senseless} positions with infinite or senseless numbers were taken as missing."
        )
    partly = sound.any(axis=2) & ~sound.all(axis=2)
    if partly.any():
        remarks.append(
            f"{int(partly.sum())} positions lack one or two of their three numbers and were "
            "taken as missing."
        )
    positions[~sound.all(axis=2)] = np.nan
    at_zero = int((positions == 0).all(axis=2).sum())
    if at_zero:
        remarks.append(
            f"{at_zero} positions are exactly 0, 0, 0 and were kept: if that stands for a marker "
            "that was not seen, leave those cells empty."
        )
    if not np.isfinite(positions).any():
        remarks.append("No marker was seen in any frame.")
    return positions


def choose_unit(asked: str | None, declared: str | None, spread: float, remarks: list[str]) -> str:
    """The unit of length: as asked, else as declared, else told from the spread (file units)."""
    if asked is not None:
        if declared and declared != asked:
            remarks.append(
                f"The file declares the unit '{declared}': taken as {asked}, as asked for by "
                "--units."
            )
        return with_doubt(asked, spread, remarks)
    if declared in METRES_PER_UNIT:
        return with_doubt(declared, spread, remarks)
    unit = unit_from_spread(spread)
    said = f"the unit '{declared}', which is not known" if declared else "no unit of length"
    why = f"the markers spread over {spread:.4g} {unit}" if spread > 0 else "by default"
    remarks.append(f"The file declares {said}: taken as {unit} ({why}); --units settles it.")
    return with_doubt(unit, spread, remarks)


def with_doubt(unit: str, spread: float, remarks: list[str]) -> str:
    """The unit, and a remark where no person spreads that far in it."""
    doubt = unlikely_spread(spread * METRES_PER_UNIT[unit])
    if doubt:
        remarks.append(f"Taken in {unit}: {doubt}.")
    return unit
