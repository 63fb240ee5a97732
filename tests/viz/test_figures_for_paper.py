"""Figures say what is drawn, with units, show gaps as gaps, and are the same bytes for the same input."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from condyle.solver.results import FittedMotion
from condyle.viz.figure_style import KINDS, paper_style, write_figure
from condyle.viz.shown_trial import SIGMAS, ShownTrial, read_shown_trial
from condyle.viz.trial_figures import trial_figures

sys.path.insert(0, str(Path(__file__).parent))
from page_trials import write_trial


@pytest.fixture
def trial(leg: FittedMotion, change: Callable[..., Any], tmp_path: Path) -> ShownTrial:
    motion = change(leg)
    motion.measured[4:8, 1] = np.nan
    motion.used[4:8, 1] = False
    return read_shown_trial(
        write_trial(tmp_path / "swing", motion), ranges={"hip_flexion_right": (-60.0, 80.0)}
    )


def figures(trial: ShownTrial) -> dict[str, Figure]:
    with paper_style():
        return dict(trial_figures(trial))


def test_there_is_a_figure_for_each_joint_and_for_the_errors(trial: ShownTrial) -> None:
    assert list(figures(trial)) == [
        "coordinates_hip", "coordinates_pelvis", "coordinates_toes", "left_over_right", "error_map",
        "residual_by_segment",
    ]  # fmt: skip


def test_every_axis_is_named_with_its_unit(trial: ShownTrial) -> None:
    for name, figure in figures(trial).items():
        for ax in figure.axes:
            said = f"{ax.get_xlabel()}{ax.get_ylabel()}"
            assert "(" in said, name
    hip, pelvis = (figures(trial)[f"coordinates_{joint}"].axes[0] for joint in ("hip", "pelvis"))
    assert hip.get_ylabel() == "angle (°)"
    assert pelvis.get_ylabel() == "position (m)"
    assert hip.get_xlabel() == "time (s)"


def test_the_band_is_196_standard_deviations_to_either_side(trial: ShownTrial) -> None:
    column = trial.columns[0]
    ax = figures(trial)["coordinates_hip"].axes[0]
    corners = ax.collections[0].get_paths()[0].vertices
    assert corners[:, 1].max() == pytest.approx((column.values + SIGMAS * column.sd).max())
    assert corners[:, 1].min() == pytest.approx((column.values - SIGMAS * column.sd).min())


def test_what_nothing_determined_is_no_curve_but_a_dotted_rest(trial: ShownTrial) -> None:
    lines = figures(trial)["coordinates_toes"].axes[0].get_lines()
    assert np.isnan(lines[0].get_ydata()).all()
    assert lines[1].get_linestyle() == ":"


def test_limits_near_the_curve_are_drawn_and_limits_reached_are_dotted(trial: ShownTrial) -> None:
    lines = figures(trial)["coordinates_hip"].axes[0].get_lines()
    level = {float(line.get_ydata()[0]) for line in lines if line.get_linestyle() == "--"}
    at = next(line for line in lines if line.get_marker() == ".")
    assert len(at.get_ydata()) == 3
    assert level <= {-60.0, 80.0}


def test_gaps_are_empty_cells_of_the_error_map(trial: ShownTrial) -> None:
    cells = np.asarray(figures(trial)["error_map"].axes[0].get_images()[0].get_array())
    empty = cells[..., 3] == 0
    assert empty[1, 4:8].all()
    assert empty.sum() == 4


def test_darkness_follows_the_error(trial: ShownTrial) -> None:
    cells = np.asarray(figures(trial)["error_map"].axes[0].get_images()[0].get_array())
    lightness = cells[0, :, :3] @ [0.2126, 0.7152, 0.0722]
    assert (np.diff(lightness) < 0).all()  # the first marker's error grows with time


def test_both_sides_share_a_panel_and_differ_by_more_than_colour(trial: ShownTrial) -> None:
    ax = figures(trial)["left_over_right"].axes[0]
    curves = {str(line.get_color()): line.get_linestyle() for line in ax.get_lines()}
    legend = {
        str(line.get_label()): (str(line.get_color()), line.get_linestyle())
        for line in ax.get_legend().get_lines()
    }
    assert {kind: style for kind, (_, style) in legend.items()} == {"right": "-", "left": "--"}
    assert all(curves[colour] == style for colour, style in legend.values())


@pytest.mark.parametrize("kind", KINDS)
def test_the_same_trial_gives_the_same_bytes(trial: ShownTrial, tmp_path: Path, kind: str) -> None:
    written = []
    for turn in ("first", "second"):
        with paper_style():
            for name, figure in trial_figures(trial):
                path = tmp_path / f"{turn}_{name}.{kind}"
                write_figure(figure, path)
                written.append(path.read_bytes())
    half = len(written) // 2
    assert written[:half] == written[half:]
    assert all(len(data) > 2000 for data in written)
    assert all(
        b"20" + year not in data for year in (b"25-", b"26-") for data in written if kind == "svg"
    )
