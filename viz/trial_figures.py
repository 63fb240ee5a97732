"""Figures of a solved trial for a paper: coordinates with 95 % bands, both sides, and what misses.

Every axis is named with its unit. Gaps stay gaps: a number that nothing determined is drawn in grey
dashes at the model's rest, and a marker that was not measured leaves its row of the error map empty.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import LinearSegmentedColormap, Normalize, to_rgba
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle

from condyle.solver.quality import MARKER_LIMIT, RMS_LIMIT
from condyle.viz import palette
from condyle.viz.figure_style import (
    MM_PER_INCH,
    SIDE_COLOURS,
    WIDTH_MM,
    hexadecimal,
    panels,
)
from condyle.viz.shown_trial import ShownColumn, ShownTrial, side_within, without_side

UNITS = {"deg": "°", "m": "m"}
NEAR_LIMIT = 0.25
"""A limit is drawn where it lies within this share of the curve's span."""

LEAST_SPAN = {"deg": 4.0, "m": 0.02}
"""A panel spans at least so much: what is still shows as still."""

ERROR_COLOURS = ("#f7f0df", "#f0c766", "#e69f00", "#d55e00", "#5c1a00")
"""From 0 to `MARKER_LIMIT`: Okabe and Ito's orange and vermillion, lighter and darker beyond them."""

LEFT_OUT = "#56b4e9"
GAP_HATCH = "////"
ROW_MM = 2.9


def trial_figures(trial: ShownTrial) -> Iterator[tuple[str, Figure]]:
    """Name and figure, one after another; draw and write them inside `paper_style`."""
    for group, columns in trial.groups().items():
        yield f"coordinates_{group}", coordinate_figure(trial, columns)
    if trial.pairs():
        yield "left_over_right", side_figure(trial)
    yield "error_map", error_map_figure(trial)
    yield "residual_by_segment", segment_figure(trial)


def coordinate_figure(trial: ShownTrial, columns: list[ShownColumn]) -> Figure:
    """The numbers of one joint over time, a panel each."""
    figure, axes = panels(len(columns), across=3, high_mm=36)
    for ax, column in zip(axes, columns, strict=True):
        _draw_column(ax, trial, column)
        _finish(ax, [column], column.name)
    return figure


def side_figure(trial: ShownTrial) -> Figure:
    """Left over right: every number that both sides have."""
    pairs = trial.pairs()
    figure, axes = panels(len(pairs), across=3, high_mm=34)
    for ax, (right, left) in zip(axes, pairs, strict=True):
        _draw_column(ax, trial, right)
        _draw_column(ax, trial, left, dashed=True)
        _finish(ax, [right, left], without_side(right.name))
    handles = [
        Line2D([], [], color=hexadecimal(SIDE_COLOURS[side]), ls=style, label=side)
        for side, style in (("right", "-"), ("left", "--"))
    ]
    axes[0].legend(handles=handles, loc="best", fontsize=7)
    return figure


def _draw_column(ax: Axes, trial: ShownTrial, column: ShownColumn, *, dashed: bool = False) -> None:
    time, known = trial.motion.time, np.isfinite(column.sd)
    colour = hexadecimal(SIDE_COLOURS[side_within(column.name)])
    style = "--" if dashed else "-"
    low, high = column.band()
    ax.fill_between(time, low, high, color=colour, alpha=0.22, linewidth=0)
    ax.plot(time, np.where(known, column.values, np.nan), style, color=colour)
    if not known.all():
        rest = np.where(known, np.nan, column.values)
        ax.plot(time, rest, ":", color=hexadecimal(palette.GREY))
    if column.at_limit.any():
        at = np.flatnonzero(column.at_limit)
        ax.plot(time[at], column.values[at], ".", color=hexadecimal(palette.VERMILLION), ms=2.5)


def _finish(ax: Axes, columns: list[ShownColumn], title: str) -> None:
    unit = columns[0].unit
    ax.set_title(title)
    ax.set_ylabel(f"{'position' if unit == 'm' else 'angle'} ({UNITS[unit]})")
    edges = [edge for column in columns for edge in (*column.band(), column.values)]
    finite = np.concatenate(edges)
    finite = finite[np.isfinite(finite)]
    if not len(finite):
        return
    low, high = float(finite.min()), float(finite.max())
    span = max(high - low, LEAST_SPAN[unit])
    for limit in {c.lower for c in columns} | {c.upper for c in columns}:
        if low - NEAR_LIMIT * span < limit < high + NEAR_LIMIT * span:
            ax.axhline(limit, color=hexadecimal(palette.VERMILLION), lw=0.7, ls=(0, (1.5, 2)))
            low, high = min(low, limit), max(high, limit)
    middle, half = (low + high) / 2, max(high - low, LEAST_SPAN[unit]) / 2 * 1.07
    ax.set_ylim(middle - half, middle + half)
    ax.margins(x=0)


def error_map_figure(trial: ShownTrial) -> Figure:
    """Marker by time: the distance from measured to fitted; hatched where not measured."""
    motion = trial.motion
    error = motion.error
    shown = np.flatnonzero(np.isfinite(error).any(axis=0))
    high = ROW_MM * max(len(shown), 1) + 26
    figure = Figure(figsize=(WIDTH_MM / MM_PER_INCH, high / MM_PER_INCH), layout="constrained")
    ax = figure.subplots()
    ax.set_title("Error of every marker over time")
    ax.set_xlabel("time (s)")
    ax.set_ylabel("marker")
    if not len(shown):
        ax.text(0.5, 0.5, "no marker was measured", ha="center", transform=ax.transAxes)
        return figure
    step = float(np.median(np.diff(motion.time))) if len(motion.time) > 1 else 1.0
    extent = (motion.time[0] - step / 2, motion.time[-1] + step / 2, len(shown) - 0.5, -0.5)
    left, right, foot, head = extent
    ax.add_patch(
        Rectangle(
            (left, head), right - left, foot - head, facecolor="white", edgecolor="0.7",
            hatch=GAP_HATCH, linewidth=0, zorder=1,
        )
    )  # fmt: skip
    colours = LinearSegmentedColormap.from_list("error", ERROR_COLOURS)
    left_out = np.isfinite(error[:, shown]) & ~motion.used[:, shown]
    cells = colours(np.clip(np.nan_to_num(error[:, shown]) / MARKER_LIMIT, 0, 1))
    cells[left_out] = to_rgba(LEFT_OUT)
    cells[~np.isfinite(error[:, shown])] = (0, 0, 0, 0)
    ax.imshow(
        cells.transpose(1, 0, 2), aspect="auto", extent=extent, interpolation="nearest", zorder=2
    )
    ax.set_yticks(range(len(shown)), [motion.marker_names[i] for i in shown], fontsize=5.5)
    ax.tick_params(axis="y", length=0)
    _error_key(figure, ax, colours, any_left_out=bool(left_out.any()))
    return figure


def _error_key(
    figure: Figure, ax: Axes, colours: LinearSegmentedColormap, *, any_left_out: bool
) -> None:
    scale = ScalarMappable(Normalize(0, 1000 * MARKER_LIMIT), colours)
    figure.colorbar(scale, ax=ax, label="error (mm)", extend="max", shrink=0.6, aspect=30, pad=0.01)
    handles = [Patch(facecolor="white", edgecolor="0.7", hatch=GAP_HATCH, label="not measured")]
    if any_left_out:
        handles.append(Patch(facecolor=LEFT_OUT, label="left out of the fit"))
    figure.legend(handles=handles, loc="outside lower right", ncols=2, fontsize=7)


def segment_figure(trial: ShownTrial) -> Figure:
    """RMS and largest error of the markers on each segment, beside the limits of `needs a look`."""
    errors = {name: e for name, e in trial.report.get("segments", {}).items() if e["marker_frames"]}
    high = 5.0 * max(len(errors), 1) + 24
    figure = Figure(figsize=(WIDTH_MM / MM_PER_INCH, high / MM_PER_INCH), layout="constrained")
    ax = figure.subplots()
    place = np.arange(len(errors))
    rms = [1000 * e["rms_error"] for e in errors.values()]
    largest = [1000 * e["largest_error"] for e in errors.values()]
    ax.barh(place, rms, height=0.62, color=hexadecimal(palette.BLUE), label="RMS")
    ax.plot(largest, place, "o", color=hexadecimal(palette.VERMILLION), ms=3.5, label="largest")
    ax.axvline(
        1000 * RMS_LIMIT, color="0.45", lw=0.8, ls="--", label="RMS of a trial that needs a look"
    )
    ax.set_yticks(place, list(errors))
    ax.invert_yaxis()
    ax.set_xlim(left=0)
    ax.set_xlabel("distance from measured to fitted marker (mm)")
    ax.set_ylabel("segment")
    ax.set_title("Residual by segment")
    figure.legend(loc="outside lower center", ncols=3, fontsize=7)
    return figure
