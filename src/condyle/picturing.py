"""`condyle picture`: which frames, from where, with what beside them, and the files that come of it.

The folder of results holds all that bones and markers need. Joint axes and ellipsoids need the subject that the
trial was solved with too, and force arrows the recording: each is used only while it is still the same file.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from condyle.model.errors import CondyleError
from condyle.pipeline import trial_folders
from condyle.provenance import file_hash
from condyle.solver.result_files import load_motion
from condyle.solver.results import FittedMotion

if TYPE_CHECKING:
    from condyle.viz.extras import Extras, Forces
    from condyle.viz.look import Look

    RowForces = Callable[[int], Forces]


@dataclass(frozen=True, slots=True)
class Pictures:
    """The files written, and what is worth saying about them."""

    files: list[Path]
    notes: list[str] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class Beside:
    """What a still shows beside the fit itself.

    Attributes
    ----------
    ghosts : solved trials' folders
    together : whether ghosts are moved onto the person's place and heading
    axes, ellipsoids : whether they are drawn
    subject : the subject that the trial was solved with, where it has moved
    """

    ghosts: Sequence[str | Path] = ()
    together: bool = False
    axes: bool = False
    ellipsoids: bool = False
    subject: str | Path | None = None


def picture(
    folder: str | Path,
    *,
    frame: int | None = None,
    time: float | None = None,
    view: str = "oblique",
    size: tuple[int, int] | None = None,
    width_mm: float | None = None,
    dpi: float = 300.0,
    exaggerate: float = 3.0,
    theme: str = "light",
    transparent: bool = False,
    beside: Beside | None = None,
    output: str | Path | None = None,
) -> Pictures:
    """Draw the worst frame, the best, and the whole trial; or the one frame asked for.

    Parameters
    ----------
    folder : what `solve` wrote, for one trial or for several
    frame : the recording's own frame number
    time : s, on the recording's clock; the nearest frame is drawn
    view : ``front``, ``side``, ``top``, ``oblique``, or a camera's YAML file
    size : (width, height) pixels; with `width_mm` only its shape counts
    width_mm, dpi : of a printed picture; letters then have a size for print
    exaggerate : how many times longer residuals (and ellipsoids) are drawn
    theme : ``light`` or ``dark``
    transparent : whether stills have no ground
    beside : ghosts, joint axes, ellipsoids
    output : the file of one picture, of one trial; its ending names the kind

    Returns
    -------
    ``worst.png``, ``best.png`` and ``contact_sheet.png`` in each trial's folder, or ``frame_N.png``; with
    another view than oblique its name is added.

    Raises
    ------
    CondyleError
        For a frame, view, size or theme that there is not, a folder without a solved trial, a subject that
        is not there, or a machine that cannot draw.
    """
    # Heavy, and refused without a GL library: only where pictures are made.
    from condyle.viz.contact_sheet import draw_contact_sheet
    from condyle.viz.overlays import picture_kind, save_picture
    from condyle.viz.stills import draw_still

    beside = beside or Beside()
    folders = trial_folders(Path(folder))
    if output is not None:
        picture_kind(output)
        _refuse_several(folders, folder)
    written, notes = [], []
    for trial in folders:
        motion = load_motion(trial)
        look = _look(motion, view, size, width_mm, dpi, exaggerate, theme, transparent)
        for name, row in _chosen(motion, trial, frame, time, alone=output is not None):
            extras, said = _extras(trial, motion, row, beside)
            notes += [note for note in said if note not in notes]
            end = "" if view == "oblique" else f"_{Path(view).stem}"
            path = Path(output) if output is not None else trial / f"{name}{end}.png"
            save_picture(draw_still(motion, row, look, extras), path, dpi=look.dpi)
            written.append(path)
        if frame is None and time is None and output is None:
            sheet = draw_contact_sheet(motion, exaggeration=exaggerate, theme=look.theme)
            save_picture(sheet, trial / "contact_sheet.png")
            written.append(trial / "contact_sheet.png")
    return Pictures(written, notes)


def _refuse_several(folders: list[Path], folder: str | Path) -> None:
    if len(folders) > 1:
        names = ", ".join(path.name for path in folders)
        raise CondyleError(
            f"{folder}: one file cannot hold the pictures of several trials ({names}).\n"
            "  Name one trial's folder, or leave the output out."
        )


def _look(
    motion: FittedMotion,
    view: str,
    size: tuple[int, int] | None,
    width_mm: float | None,
    dpi: float,
    exaggerate: float,
    theme: str,
    transparent: bool,
) -> Look:
    from condyle.viz.look import SHAPE, Look, printed
    from condyle.viz.theme import theme_called

    common: dict[str, Any] = {
        "view": camera_named(view, motion),
        "exaggeration": exaggerate,
        "theme": theme_called(theme),
        "transparent": transparent,
    }
    if width_mm is None:
        return Look(size=size or SHAPE, **common)
    pixels, letters = printed(width_mm=width_mm, dpi=dpi, size=size)
    return Look(size=pixels, letters=letters, grows=size is None, dpi=dpi, **common)


def camera_named(view: str, motion: FittedMotion) -> Any:
    """A view by its name, or the camera of a file."""
    from condyle.viz.camera_file import read_camera
    from condyle.viz.viewpoint import VIEWS, ViewError, up_vector

    if view in VIEWS:
        return view
    if not Path(view).is_file():
        raise ViewError(
            f"no view is called '{view}', and no file either.\n"
            f"  The views are {', '.join(VIEWS)}, or a YAML file with position and target."
        )
    return read_camera(Path(view), up_vector(motion.up))


def _chosen(
    motion: FittedMotion, trial: Path, frame: int | None, time: float | None, *, alone: bool
) -> list[tuple[str, int]]:
    """Names and rows of the stills."""
    from condyle.viz.frame_figures import best_row, worst_row

    if frame is not None and time is not None:
        raise CondyleError("--frame and --time both choose the frame.\n  Leave one of them out.")
    if frame is not None:
        rows = np.flatnonzero(motion.frame == frame)
        if not len(rows):
            raise CondyleError(
                f"{trial}: there is no frame {frame}.\n"
                f"  Frames run from {motion.frame[0]} to {motion.frame[-1]}."
            )
        return [(f"frame_{frame}", int(rows[0]))]
    if time is not None:
        row = row_at(motion, time, trial)
        return [(f"frame_{motion.frame[row]}", row)]
    worst = ("worst", worst_row(motion))
    return [worst] if alone else [worst, ("best", best_row(motion))]


def row_at(motion: FittedMotion, time: float, trial: Path) -> int:
    """The row nearest a time (s).

    Raises
    ------
    CondyleError
        Where the trial has none within half a frame.
    """
    row = int(np.argmin(np.abs(motion.time - time)))
    step = float(np.median(np.diff(motion.time))) if len(motion.time) > 1 else 1.0
    if not abs(float(motion.time[row]) - time) <= 0.51 * step:
        raise CondyleError(
            f"{trial}: there is no frame at {time:g} s.\n"
            f"  The trial runs from {motion.time[0]:.3f} to {motion.time[-1]:.3f} s."
        )
    return row


def _extras(
    trial: Path, motion: FittedMotion, row: int, beside: Beside
) -> tuple[Extras, list[str]]:
    """What is drawn beside one row's fit, and what is worth saying about it."""
    from condyle.viz.extras import Extras, ghost_of

    notes: list[str] = []
    ghosts = tuple(
        ghost_of(
            load_motion(other),
            float(motion.time[row]),
            beside=motion,
            row=row,
            together=beside.together,
        )
        for folder in beside.ghosts
        for other in trial_folders(Path(folder))
    )
    of_row = plate_forces(trial, motion, notes)
    forces = None if of_row is None else of_row(row)
    if not (beside.axes or beside.ellipsoids):
        return Extras(ghosts=ghosts, forces=forces), notes
    from condyle.exporting import subject_of
    from condyle.model import load_skeleton
    from condyle.posed_subject import joint_axes, known_places, posed_subject

    posed = posed_subject(trial, motion, row, load_skeleton(subject_of(trial, beside.subject)))
    clouds, pinned = known_places(trial, posed, motion, row) if beside.ellipsoids else (None, ())
    if pinned:
        notes.append(
            f"{trial.name}: ellipsoids take as known what was held, at a limit or undetermined: "
            f"{', '.join(pinned)}"
        )
    axes = joint_axes(posed) if beside.axes else None
    said = (
        ("Ellipsoids: what this frame's markers leave open, sizes and marker places as known.",)
        if beside.ellipsoids
        else ()
    )
    return Extras(ghosts, axes, clouds, forces, said), notes


def plate_forces(trial: Path, motion: FittedMotion, notes: list[str]) -> RowForces | None:
    """The plates' forces in any row, where the trial's recording has plates and is still what it was."""
    from condyle.recording.plate_forces import read_plate_forces
    from condyle.viz.extras import Forces, force_scale

    recording, sha256 = recorded_trial(trial)
    if recording is None or recording.suffix.lower() != ".c3d" or not recording.is_file():
        return None
    if file_hash(recording) != sha256:
        notes.append(f"{trial.name}: {recording} has changed since, so no forces are drawn from it")
        return None
    try:
        plates = read_plate_forces(recording)
    except CondyleError as fault:
        notes.append(str(fault).splitlines()[0])
        return None
    if plates is None or not set(motion.frame.tolist()) <= set(plates.frame.tolist()):
        return None
    first, scale = int(plates.frame[0]), force_scale(plates.largest())

    def of_row(row: int) -> Forces:
        at = int(motion.frame[row]) - first
        return Forces(plates.centre[at], plates.force[at], scale)

    return of_row


def recorded_trial(trial: Path) -> tuple[Path | None, str | None]:
    """The recording that `fit.json` names, and its hash."""
    try:
        content = json.loads((trial / "fit.json").read_text(encoding="utf-8"))
        return Path(content["trial"]["file"]), str(content["trial"]["sha256"])
    except (OSError, ValueError, KeyError, TypeError):
        return None, None
