"""How figures for paper look, and how they are written so that the same input gives the same bytes.

Sizes are those of journals: a figure is two columns wide, lettering stays readable in print. What would
change from run to run is left out: the date, the program's name, the random names inside SVG.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from matplotlib import rc_context, rcdefaults, rcParams
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from condyle.model.whole_files import whole_file
from condyle.viz import palette

WIDTH_MM = 180.0
"""Two columns of most journals."""

MM_PER_INCH = 25.4
DOTS_PER_INCH = 300

KINDS = ("png", "svg", "pdf")

SIDE_COLOURS = {"right": palette.GREEN, "left": (204, 121, 167), "": palette.BLUE}
"""Okabe and Ito's bluish green, reddish purple and blue: not those of markers measured and fitted."""

_UNDATED: dict[str, dict[str, Any]] = {
    "png": {"Software": None},
    "svg": {"Date": None, "Creator": None},
    "pdf": {"CreationDate": None, "Creator": None, "Producer": None},
}

_STYLE: dict[str, Any] = {
    "font.family": "DejaVu Sans",  # ships with matplotlib, so that no machine differs
    "font.size": 7.5,
    "axes.titlesize": 8,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 7.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.6,
    "axes.unicode_minus": True,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "lines.linewidth": 1.1,
    "legend.frameon": False,
    "svg.hashsalt": "condyle",
    "svg.fonttype": "none",
    "pdf.fonttype": 42,
    "path.simplify": True,
}


@contextmanager
def paper_style() -> Iterator[None]:
    """Everything drawn and written inside looks like a figure of ours, whatever the user's settings."""
    settings: Any = rcParams  # its keys are typed one by one
    with rc_context():
        rcdefaults()
        settings.update(_STYLE)
        yield


def hexadecimal(colour: palette.Colour) -> str:
    """A colour as matplotlib reads it."""
    return "#{:02x}{:02x}{:02x}".format(*colour)


def panels(count: int, *, across: int, high_mm: float) -> tuple[Figure, list[Axes]]:
    """A figure of so many panels, row by row, all on the same time axis."""
    across = min(across, count)
    down = -(-count // across)
    size = (WIDTH_MM / MM_PER_INCH * across / 3 if across < 3 else WIDTH_MM / MM_PER_INCH,
            (high_mm * down + 6) / MM_PER_INCH)  # fmt: skip
    figure = Figure(figsize=size, layout="constrained")
    grid = figure.subplots(down, across, squeeze=False, sharex=True)
    axes = [ax for row in grid for ax in row]
    for empty in axes[count:]:
        empty.remove()
    for index, ax in enumerate(axes[:count]):
        if index + across >= count:
            ax.tick_params(labelbottom=True)
            ax.set_xlabel("time (s)")
    return figure, axes[:count]


def write_figure(figure: Figure, path: Path) -> None:
    """Write a figure whole or not at all; the ending names its kind.

    Raises
    ------
    CondyleError
        Where the system refuses the path.
    """
    kind = path.suffix[1:]
    with whole_file(path) as beside:
        figure.savefig(beside, format=kind, dpi=DOTS_PER_INCH, metadata=_UNDATED[kind])
