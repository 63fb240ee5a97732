"""From folders of results to pages and figures that a person reads."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from condyle.model import load_skeleton
from condyle.model.errors import CondyleError
from condyle.model.whole_files import cannot_write, whole_file
from condyle.pipeline import trial_folders
from condyle.provenance import file_hash, versions

if TYPE_CHECKING:
    from condyle.solver.results import FittedMotion
    from condyle.viz.shown_trial import ShownTrial
    from condyle.viz.trial_page import Still

PAGE, INDEX = "report.html", "index.html"

STILL_SIZE = (1000, 750)
"""Pixels of the picture that stands in a page."""


@dataclass(frozen=True, slots=True)
class Report:
    """What `report` wrote.

    Attributes
    ----------
    pages : one a trial
    index : the page of the study, where the folder holds several trials
    remarks : what a page had to do without, and why
    """

    pages: tuple[Path, ...]
    index: Path | None
    remarks: tuple[str, ...]

    @property
    def to_open(self) -> Path:
        """The page to begin with."""
        return self.index or self.pages[0]


@dataclass(frozen=True, slots=True)
class Figures:
    """What `figures` wrote, and what they had to do without."""

    files: tuple[Path, ...]
    remarks: tuple[str, ...]


def report(
    folder: str | Path,
    *,
    subject: str | Path | None = None,
    watch: Callable[[str, float], None] | None = None,
) -> Report:
    """Write a page for every solved trial in a folder, and one for all of them.

    Parameters
    ----------
    folder : what `solve` wrote, for one trial or for several
    subject : the subject that the trials were solved with, where it has moved; its limits are drawn
    watch : callable, optional
        Told a trial's name and the share of its work done.

    Returns
    -------
    Report
        ``report.html`` in each trial's folder, and ``index.html`` where the folder holds trials.

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or a damaged one.
    """
    from condyle.viz.study_page import study_page

    folder = Path(folder)
    trials = trial_folders(folder)
    is_study = trials != [folder]
    shown, pages, remarks = [], [], []
    for trial in trials:
        page, read, remark = _report_trial(trial, subject, asked=folder)
        shown.append((read, f"{trial.name}/{PAGE}"))
        pages.append(page)
        remarks += [r for r in remark if r not in remarks]
        if watch is not None:
            watch(trial.name, 1.0)
    if not is_study:
        return Report(tuple(pages), None, tuple(remarks))
    index = folder / INDEX
    _write(index, study_page(folder.resolve().name, shown))
    return Report(tuple(pages), index, tuple(remarks))


def figures(
    folder: str | Path,
    *,
    kinds: Sequence[str] = ("png",),
    subject: str | Path | None = None,
    watch: Callable[[str, float], None] | None = None,
) -> Figures:
    """Draw the figures of every solved trial in a folder, for papers.

    Parameters
    ----------
    folder : what `solve` wrote, for one trial or for several
    kinds : ``png``, ``svg`` or ``pdf``
    subject : the subject that the trials were solved with, where it has moved; its limits are drawn
    watch : callable, optional
        Told a trial's name and the share of its work done.

    Returns
    -------
    Figures
        In ``figures`` in each trial's folder: ``coordinates_JOINT``, ``left_over_right``, ``error_map``
        and ``residual_by_segment``. The same results give the same bytes.

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or a kind is not one of those.
    """
    from condyle.viz.figure_style import KINDS, paper_style, write_figure
    from condyle.viz.trial_figures import trial_figures

    unknown = [kind for kind in kinds if kind not in KINDS]
    if unknown:
        raise CondyleError(
            f"--kind {unknown[0]}: figures are not written so.\n  The kinds: {', '.join(KINDS)}."
        )
    files, remarks = [], []
    for folder_of_trial in trial_folders(Path(folder)):
        trial, remark = read_trial(folder_of_trial, subject)
        remarks += remark
        place = folder_of_trial / "figures"
        _make(place)
        with paper_style():
            for name, figure in trial_figures(trial):
                for kind in kinds:
                    files.append(place / f"{name}.{kind}")
                    write_figure(figure, files[-1])
        if watch is not None:
            watch(trial.name, 1.0)
    return Figures(tuple(files), tuple(remarks))


def _make(folder: Path) -> None:
    try:
        folder.mkdir(exist_ok=True)
    except OSError as fault:
        raise cannot_write(folder, fault) from fault


def _report_trial(
    folder: Path, subject: str | Path | None, *, asked: Path
) -> tuple[Path, ShownTrial, list[str]]:
    from condyle.viz.trial_page import trial_page

    trial, remarks = read_trial(folder, subject)
    stills, unable = _stills(trial.motion)
    origin = {
        "page": f"condyle report {asked}, Condyle {versions()['condyle']}",
        "folder": str(folder),
    }
    index = f"../{INDEX}" if asked != folder else None
    page = folder / PAGE
    _write(page, trial_page(trial, stills=stills, origin=origin, index=index))
    return page, trial, remarks + unable


def read_trial(folder: Path, subject: str | Path | None) -> tuple[ShownTrial, list[str]]:
    """A solved trial with its model's limits, or without them and a remark why."""
    from condyle.viz.shown_trial import read_shown_trial

    plain = read_shown_trial(folder)
    found = _subject_file(folder, plain.report.get("subject", {}), subject)
    try:
        ranges = None if found is None else _ranges(found)
    except CondyleError:
        if subject is not None:
            raise
        ranges = None  # what it extends may have moved: numbers are shown all the same
    if ranges is None:
        remark = (
            f"{folder}: the subject it was solved with is not there or has changed; limits are not "
            "drawn (--subject FILE names it)"
        )
        return plain, [remark]
    return read_shown_trial(folder, ranges=ranges), []


def _subject_file(folder: Path, recorded: dict[str, Any], given: str | Path | None) -> str | None:
    """The subject of a trial: the file of that hash, where it was or beside the results."""
    name, sha256 = str(recorded.get("file", "")), recorded.get("sha256")
    if given is not None:
        if not Path(given).is_file():
            raise CondyleError(f"{given}: no such file.\n  Name the subject of these trials.")
        return str(given)
    if sha256 is None:  # a shipped model by its name
        return name or None
    near = [Path(name), *(above / Path(name).name for above in folder.resolve().parents[:3])]
    return next((str(p) for p in near if p.is_file() and file_hash(p) == sha256), None)


def _ranges(subject: str) -> dict[str, tuple[float, float]]:
    """Coordinate -> its limits in deg or m."""
    found = {}
    for coordinate in load_skeleton(subject).coordinates:
        if coordinate.has_range:
            turn = math.degrees if coordinate.unit == "rad" else float
            found[coordinate.name] = (turn(coordinate.lower), turn(coordinate.upper))
    return found


def _stills(motion: FittedMotion) -> tuple[list[Still], list[str]]:
    """The worst frame as a picture; none where this machine cannot draw."""
    from condyle.viz.few_colours import few_colours
    from condyle.viz.frame_figures import NoFrameError, frame_figures, worst_row
    from condyle.viz.offscreen import NoGraphicsError
    from condyle.viz.overlays import draw_overlay
    from condyle.viz.trial_page import Still

    try:
        row = worst_row(motion)
        image = draw_overlay(motion, row, size=STILL_SIZE)
    except (NoGraphicsError, NoFrameError) as fault:
        return [], [f"pages have no still: {fault}"]
    png = few_colours(image)
    caption = f"The frame with the largest RMS error: {frame_figures(motion, row).line()}."
    alt = "The fitted skeleton with measured markers, in the frame that fits worst"
    return [Still(png, alt, caption, image.size)], []


def _write(path: Path, text: str) -> None:
    with whole_file(path) as beside:
        beside.write_text(text, encoding="utf-8", newline="\n")
