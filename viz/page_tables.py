"""The numbers of a page that hold for the whole trial: errors by marker and segment, and ranges."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from condyle.viz.page_html import Content, Markup, table
from condyle.viz.shown_trial import SIGMAS, ShownColumn, ShownTrial

FULL_BAR = 0.02
"""m; a bar this long fills its cell: the RMS error above which a fit needs a look."""


def segment_errors(report: Mapping[str, Any]) -> Markup:
    """RMS and largest error of the markers on each segment."""
    rows = [
        (name, _millimetres(e["rms_error"]), ("bar-cell", _bar(e["rms_error"])),
         _millimetres(e["largest_error"]), e["marker_frames"])
        for name, e in report.get("segments", {}).items()
        if e["marker_frames"]
    ]  # fmt: skip
    return table(["segment", "RMS", "", "largest", "marker-frames"], rows)


def marker_errors(trial: ShownTrial) -> Markup:
    """RMS and largest error of each marker with the time of the largest, the worst first."""
    rows = []
    used = trial.motion.used
    for index, name in enumerate(trial.motion.marker_names):
        error = np.where(used[:, index], trial.motion.error[:, index], np.nan)
        if not np.isfinite(error).any():
            continue
        worst, rms = int(np.nanargmax(error)), float(np.sqrt(np.nanmean(error**2)))
        gone = 1.0 - used[:, index].mean()
        rows.append(
            (
                rms,
                (
                    name,
                    _millimetres(rms),
                    ("bar-cell", _bar(rms)),
                    _millimetres(float(error[worst])),
                    f"{trial.motion.time[worst]:.2f} s",
                    f"{100 * gone:.0f} %",
                ),
            )
        )
    rows.sort(key=lambda row: -row[0])
    heads = ["marker", "RMS", "", "largest", "at", "missing or left out"]
    return table(heads, [cells for _, cells in rows])


def ranges(columns: tuple[ShownColumn, ...]) -> Markup:
    """Minimum, maximum, range and how certain, of every number that something determined."""
    rows: list[tuple[Content, ...]] = []
    for column in columns:
        known = np.isfinite(column.sd)
        if not known.any():
            rows.append((column.name, "not determined", "", "", "", ""))
            continue
        values = column.values[known]
        low, high = float(values.min()), float(values.max())
        half = SIGMAS * float(np.median(column.sd[known]))
        at = f"{100 * column.at_limit.mean():.0f} %" if column.at_limit.any() else ""
        shown = (_shown(v, column.unit) for v in (low, high, high - low))
        rows.append((column.name, *shown, f"±{_shown(half, column.unit)}", at))
    heads = ["", "minimum", "maximum", "range", "95 % (median)", "at a limit"]
    return table(heads, rows)


def _shown(value: float, unit: str) -> str:
    return f"{value:.1f}°" if unit == "deg" else f"{value:.3f} m"


def _millimetres(metres: float | None) -> str:
    return "" if metres is None else f"{1000 * metres:.1f} mm"


def _bar(metres: float | None) -> Markup:
    share = min((metres or 0.0) / FULL_BAR, 1.0)
    return Markup(
        '<svg viewBox="0 0 150 10" role="presentation">'
        f'<rect class="bar-fill" width="{150 * share:.1f}" height="10" rx="2"/></svg>'
    )
