"""From files to files: read, calibrate or solve, save. What each command does, without a screen."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter
from typing import Any

from condyle.model import load_skeleton, load_tree
from condyle.model.body_tables import kept_by_body_table, tree_with_masses, with_body_table
from condyle.model.errors import CondyleError, FitError
from condyle.model.skeleton import Skeleton
from condyle.model.whole_files import cannot_write
from condyle.model.writing import write_subject
from condyle.provenance import file_hash, model_hash, versions
from condyle.recording import read_lengths, read_recording
from condyle.recording.describing import RecordingReport, describe
from condyle.recording.labels import match_labels, read_label_map, write_label_map
from condyle.recording.recording import Recording
from condyle.solver.backends import backend
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.marker_size import with_marker_diameter
from condyle.solver.matching import match_markers
from condyle.solver.quality import Finding, calibration_findings, trial_findings
from condyle.solver.result_files import save_trial
from condyle.solver.results import Calibration, TrialFit
from condyle.solver.robust_loss import LOSSES, Loss
from condyle.solver.subject_covariance import (
    SubjectCovariance,
    independent,
    read_covariance,
    write_covariance,
)
from condyle.solver.trial_fit import clipped, fit_trial


@dataclass(frozen=True, slots=True)
class SizedSubject:
    """What `calibrate` made: the estimate, where it was written, what is worth saying."""

    calibration: Calibration
    output: Path
    findings: list[Finding]


@dataclass(frozen=True, slots=True)
class SolvedTrial:
    """What `solve` made of one trial: the fit, its folder, what is worth saying."""

    fit: TrialFit
    folder: Path
    findings: list[Finding]
    seconds: float


def describe_recording(file: str | Path, *, units: str | None = None) -> RecordingReport:
    """What a recording holds, in the unit of length given or else the file's own."""
    return describe(read_recording(Path(file), units=units))


def calibrate(
    model: str | Path,
    static: str | Path,
    output: str | Path,
    *,
    moving: Sequence[str | Path] = (),
    mass: float | None = None,
    stature: float | None = None,
    lengths: str | Path | None = None,
    marker_diameter: float | None = None,
    body_table: str | None = None,
    labels: str | Path | None = None,
    units: str | None = None,
    up: str | None = None,
    start: float | None = None,
    end: float | None = None,
) -> SizedSubject:
    """Size a model to the person of a static trial, and of movement, and write SUBJECT.yaml.

    Parameters
    ----------
    model : a shipped model's name, or a file
    static : the static trial
    output : the file to write
    moving : trials in which the same person moves
    mass, stature : kg, m
    lengths : a file ``{segment: m}`` of what a tape measured
    marker_diameter : m; by default what the model's places are meant for
    body_table : whose masses, centres and radii: ``de_leva_female`` and so on (`model.body_tables`)
    labels : a file ``{model marker: label in the recording}``
    units : the static's unit of length, ``mm`` or ``m``; wins over what the file declares
    up : the laboratory axis that points up
    start, end : s of the still part

    Raises
    ------
    CondyleError
        If anything in the input is wrong; then nothing is written.
    """
    # Heavy, and of no use in solving.
    from condyle.solver.calibration import calibrate as calibrate_skeleton

    output = Path(output)
    _check_folder(output.parent)
    skeleton, tree = load_skeleton(model), load_tree(model)
    findings: list[Finding] = []
    if body_table is not None:
        kept = kept_by_body_table(skeleton, body_table)
        skeleton = with_body_table(skeleton, body_table)
        tree = tree_with_masses(tree, skeleton)
        if kept:
            findings.append(
                Finding(
                    f"{body_table} says nothing of {', '.join(kept)}",
                    "their masses stay as the model has them",
                )
            )
    recording = read_recording(Path(static), units=units)
    label_map = _label_map(labels, skeleton)
    _refuse_few_labels(skeleton, recording, label_map, up, output)
    nominal = skeleton
    if marker_diameter is not None:
        nominal = with_marker_diameter(skeleton, marker_diameter)
    found = calibrate_skeleton(
        nominal,
        recording,
        moving=[read_recording(Path(trial), units=units) for trial in moving],
        lengths=None if lengths is None else read_lengths(Path(lengths)),
        stature=stature,
        mass=mass,
        labels=label_map,
        up=up,
        start=start,
        end=end,
    )
    sized = found.skeleton
    write_subject(
        output,
        tree,
        sizes=sized.sizes,
        placed={m.name: (m.placed, m.placed_sd) for m in found.markers},
        subject=sized.subject,
        labels=sized.labels,
        up=sized.up,
        joints=[joint for joint in sized.joints if joint.placed or joint.axis_turn],
        calibration={
            "model": skeleton.name,
            "model_sha256": model_hash(str(model), load_tree(model)),
            "static": Path(static).name,
            "static_sha256": file_hash(Path(static)),
            "still": [round(float(t), 6) for t in found.still],
            "moving": [
                {"file": Path(trial).name, "sha256": file_hash(Path(trial))} for trial in moving
            ],
            **_given(lengths, marker_diameter, body_table),
            "up": found.up_how,
            "covariance": covariance_file(output).name,
            "condyle": versions()["condyle"],
        },
    )
    write_covariance(covariance_file(output), found.covariance)
    return SizedSubject(found, output, [*calibration_findings(found), *findings])


def _given(
    lengths: str | Path | None, marker_diameter: float | None, body_table: str | None
) -> dict[str, object]:
    """What was told beside the recordings, for the record."""
    told = {
        "lengths": None if lengths is None else read_lengths(Path(lengths)),
        "marker_diameter": marker_diameter,
        "body_table": body_table,
    }
    return {key: value for key, value in told.items() if value is not None}


def covariance_file(subject: Path) -> Path:
    """Where the covariance of a subject's sizes and marker places stands: beside its file."""
    return subject.with_name(f"{subject.stem}-covariance.npz")


def solve(
    subject: str | Path,
    trials: Sequence[str | Path],
    output: str | Path,
    *,
    smooth: bool = True,
    covariance: bool = False,
    loss: str = "squares",
    labels: str | Path | None = None,
    units: str | None = None,
    up: str | None = None,
    start: float | None = None,
    end: float | None = None,
    watch: Callable[[str, float], None] | None = None,
) -> list[SolvedTrial]:
    """Fit every frame of some trials and write a folder of results for each.

    Parameters
    ----------
    subject : a sized model's file, or any model as it stands
    trials : recordings
    units : their unit of length, ``mm`` or ``m``; wins over what the files declare
    output : the folder that gets one folder a trial
    smooth : bool
        Whether each trial is one estimate, with rates and accelerations; else each frame is by itself.
    covariance : bool
        Whether the covariance of all numbers of each frame is written too (``covariance.npz``).
    loss : ``squares``, or ``huber`` or ``geman_mcclure`` where some markers are plainly wrong
    watch : callable, optional
        Told the trial's name and the share of its work done.

    Raises
    ------
    CondyleError
        If anything in the input is wrong. Every trial is read and matched before the first is fitted.
    """
    chosen_loss = _loss(loss)
    skeleton = load_skeleton(subject)
    label_map = _label_map(labels, skeleton)
    paths = [Path(trial) for trial in trials]
    _check_stems(paths)
    _check_folder(Path(output).parent)
    recordings = [
        clipped(read_recording(path, units=units), start=start, end=end) for path in paths
    ]
    for recording in recordings:
        match_markers(skeleton, recording, label_map)
    functions = SkeletonFunctions(skeleton)
    known = _subject_covariance(subject, skeleton)
    solved = []
    for path, recording in zip(paths, recordings, strict=True):
        began = perf_counter()
        fit = fit_trial(
            skeleton,
            recording,
            up=up,
            labels=label_map,
            smooth=smooth,
            covariance=covariance,
            loss=chosen_loss,
            subject=known,
            functions=functions,
            watch=None if watch is None else _watching(watch, path.stem),
        )
        findings = [*trial_findings(fit), *_also_calibrated(skeleton, path)]
        folder = Path(output) / path.stem
        seconds = perf_counter() - began
        origin = _origin(subject, skeleton, path, recording, seconds)
        origin |= {"smoothed": fit.smoothing is not None, "loss": loss}
        save_trial(fit, skeleton, folder, findings=findings, origin=origin)
        solved.append(SolvedTrial(fit, folder, findings, seconds))
    return solved


def trial_folders(folder: Path) -> list[Path]:
    """The solved trials in a folder: itself, or those it holds.

    Raises
    ------
    CondyleError
        If there is none.
    """
    if (folder / "fit.json").is_file():
        return [folder]
    found = sorted(path.parent for path in folder.glob("*/fit.json"))
    if not found:
        raise CondyleError(
            f"{folder}: no solved trial is there.\n"
            "  Name a folder that condyle solve wrote, one trial's or the one that holds several."
        )
    return found


def _watching(watch: Callable[[str, float], None], name: str) -> Callable[[float], None]:
    return lambda share: watch(name, share)


def _subject_covariance(subject: str | Path, skeleton: Skeleton) -> SubjectCovariance | None:
    """What calibration does not know of a sized subject; None of a model as it stands."""
    if not skeleton.sizes:
        return None
    name = skeleton.calibration.get("covariance")
    file = Path(subject).parent / str(name)
    if name is None or not file.is_file():
        return independent(skeleton)
    return read_covariance(file, skeleton)[0]


def _loss(name: str) -> Loss | None:
    if name not in LOSSES:
        raise CondyleError(f"there is no loss called {name!r}.\n  Choose {', '.join(LOSSES)}.")
    return LOSSES[name]


def _label_map(labels: str | Path | None, skeleton: Skeleton) -> Mapping[str, str] | None:
    """The user's map, whose markers must be the model's."""
    if labels is None:
        return None
    found = read_label_map(Path(labels))
    unknown = sorted(set(found) - set(skeleton.marker_names))
    if unknown:
        raise CondyleError(
            f"{labels}: {skeleton.name} has no marker called {', '.join(unknown)}.\n"
            f"  Its markers: {', '.join(sorted(skeleton.marker_names))}."
        )
    return found


def _refuse_few_labels(
    skeleton: Skeleton,
    static: Recording,
    labels: Mapping[str, str] | None,
    up: str | None,
    output: Path,
) -> None:
    """Where fewer than half the markers have a label, write a draft map and say so."""
    names = skeleton.marker_names
    match = match_labels(names, static.labels, labels or {})
    if 2 * len(match.missing) <= len(names):
        return
    from condyle.solver.draft_map import draft_labels

    known = {n: static.labels[c] for n, c in match.columns.items() if c is not None}
    draft = output.with_name(f"{output.stem}_labels_draft.yaml")
    guesses = draft_labels(skeleton, static, known, up)
    write_label_map(draft, guesses)
    raise FitError(
        f"{static.source}: only {len(known)} of the {len(names)} markers of {skeleton.name} have a "
        "label here; sizing needs at least half.\n"
        f"  A draft map of {len(guesses)} labels, guessed from where the points are, is in {draft}: "
        "correct it and give it with --labels."
    )


def _check_stems(paths: Sequence[Path]) -> None:
    stems = [path.stem for path in paths]
    twice = sorted({stem for stem in stems if stems.count(stem) > 1})
    if twice:
        raise CondyleError(
            f"two trials are called {', '.join(twice)}: their results would share a folder.\n"
            "  Solve them into different folders, or rename one."
        )


def _check_folder(folder: Path) -> None:
    """Refuse early what could not be written late."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        raise cannot_write(folder, fault) from fault


def _also_calibrated(skeleton: Skeleton, trial: Path) -> list[Finding]:
    used = [skeleton.calibration.get("static_sha256")]
    moving = skeleton.calibration.get("moving")
    used += (
        [m.get("sha256") for m in moving if isinstance(m, dict)] if isinstance(moving, list) else []
    )
    if file_hash(trial) not in used:
        return []
    return [
        Finding(
            "this trial also served to calibrate: its errors say nothing about the fit of others",
            "judge the skeleton by a trial it has not seen",
        )
    ]


def _origin(
    subject: str | Path, skeleton: Skeleton, trial: Path, recording: Recording, seconds: float
) -> dict[str, Any]:
    path = Path(subject)
    return {
        "subject": {
            "name": skeleton.name,
            "file": str(subject),
            "sha256": file_hash(path) if path.is_file() else None,
            "sized": bool(skeleton.sizes),
        },
        "trial": {
            "file": str(trial),
            "sha256": file_hash(trial),
            "units": recording.units,
            "remarks": list(recording.remarks),
        },
        "versions": versions(),
        "backend": {"name": backend().name, "remark": backend().remark},
        "seconds": round(seconds, 3),
    }
