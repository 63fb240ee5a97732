"""Each command's answer, for a person or as JSON, and the exit status that goes with it."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from condyle.checking import CoordinateReport, ModelReport
from condyle.model.growth import sized_lengths
from condyle.pipeline import SizedSubject, SolvedTrial
from condyle.placement_sheet import sheet_lines
from condyle.recording.describing import RecordingReport, report_lines
from condyle.screen import progress, say, show_findings, show_json, show_table
from condyle.solver.backends import backend
from condyle.solver.fit_report import CAUTION
from condyle.solver.quality import Finding, error_summary

if TYPE_CHECKING:
    from condyle.demo_data import AngleErrors
    from condyle.demonstration import Demonstration
    from condyle.exporting import Exported
    from condyle.filming import Movie
    from condyle.picturing import Pictures
    from condyle.solver.results import KnownBetter

DONE, NEEDS_A_LOOK = 0, 1

Watch = Callable[[str, float], None]


def status_of(findings: Sequence[Finding]) -> int:
    """1 where anything needs a look, else 0."""
    return NEEDS_A_LOOK if any(f.needs_look for f in findings) else DONE


def _findings(findings: Sequence[Finding]) -> list[dict[str, Any]]:
    return [{"what": f.what, "do": f.do, "needs_a_look": f.needs_look} for f in findings]


def show_recording(report: RecordingReport, *, as_json: bool) -> int:
    """What a recording holds."""
    if as_json:
        show_json(asdict(report))
    else:
        for line in report_lines(report):
            say(line)
    return DONE


def show_model(report: ModelReport, *, as_json: bool) -> int:
    """A model's tree, coordinates and markers."""
    if as_json:
        show_json(report.as_dict())
        return DONE
    if report.picture:
        say(report.picture)
    if report.marker_list is not None:
        for line in sheet_lines(report.marker_list, model=report.name):
            say(line)
        say("")
        say(CAUTION)
    if report.picture or report.marker_list is not None:
        return DONE
    say(f"{report.name}{' (sized to a person)' if report.sized else ''}: {report.about}")
    for depth, segment, joint, kind in report.tree:
        markers = report.markers[segment]
        count = f"  [{len(markers)} markers]" if markers else ""
        say(f"{'  ' * (depth + 1)}{segment}  <- {joint} ({kind}){count}")
    rows = [
        (
            c.name,
            c.joint,
            _number(c.lower, c.unit),
            _number(c.upper, c.unit),
            _rest(c),
            _told(c, report),
        )
        for c in _by_joint(report)
    ]
    show_table("", ["coordinate", "joint", "from", "to", "rest", "sd from markers"], rows)
    for segment, markers in report.markers.items():
        if markers:
            say(f"markers of {segment}: {', '.join(markers)}")
    if report.without_place:
        say(f"without a place until a static gives one: {', '.join(report.without_place)}")
    for remark in report.mesh_remarks:
        say(remark)
    if report.taken_by_ties:
        say(f"{report.freedoms} freedoms, of which the ties take {report.taken_by_ties}")
    for first, second, correlation in report.pairs:
        say(f"hardly told apart: {first} and {second} (correlation {correlation:+.2f})")
    for region in report.singular:
        say(region.said)
    if report.unseen:
        say(
            f"not determined by any marker: {', '.join(report.unseen)} (such a coordinate stays "
            "at rest, and its sd is empty)"
        )
    for name, segment in report.remedies.items():
        say(f"  markers on {segment} would tell {name}")
    return DONE


def _by_joint(report: ModelReport) -> list[CoordinateReport]:
    """Coordinates and reported angles, those of a joint together."""
    rows = [*report.coordinates, *report.angles]
    joints = [name for _, _, name, _ in report.tree]
    return sorted(rows, key=lambda row: joints.index(row.joint) if row.joint in joints else -1)


def _number(value: float | None, unit: str) -> str:
    return "" if value is None else f"{value:g} {unit}"


def _rest(coordinate: CoordinateReport) -> str:
    return (
        _number(coordinate.rest, coordinate.unit) if coordinate.role == "free" else coordinate.role
    )


def _told(coordinate: CoordinateReport, report: ModelReport) -> str:
    if coordinate.sd is None:
        return "none" if coordinate.name in report.unseen else ""
    return f"{coordinate.sd:.2g} deg" if coordinate.unit == "deg" else f"{coordinate.sd:.2g} m"


def show_subject(made: SizedSubject, *, as_json: bool) -> int:
    """What a calibration found."""
    found = made.calibration
    lengths = sized_lengths(found.skeleton)
    metres = {c.name for c in found.skeleton.coordinates if c.unit == "m"}
    placed = [m for m in found.markers if m.departure is not None]
    rms = math.sqrt(
        sum(sum(d * d for d in m.departure or ()) for m in placed) / max(len(placed), 1)
    )
    if as_json:
        show_json(
            {
                "subject": str(made.output),
                "up": {"axis": found.up, "how": found.up_how},
                "still": list(found.still),
                "lengths": lengths,
                "factors": {name: asdict(size) for name, size in found.skeleton.sizes.items()},
                "posture": {
                    name: value if name in metres else math.degrees(value)
                    for name, value in found.posture.items()
                },
                "markers": [asdict(marker) for marker in found.markers],
                "joints": {
                    joint.name: {"placed": joint.placed, "placed_sd": joint.placed_sd}
                    | {"axis_turn": joint.axis_turn, "axis_turn_sd": joint.axis_turn_sd}
                    for joint in found.skeleton.joints
                    if joint.placed or joint.axis_turn
                },
                "known_better": [asdict(number) for number in found.known_better],
                "movement": None if found.movement is None else asdict(found.movement),
                "markers_without_label": list(found.without_label),
                "labels_not_in_model": list(found.other_labels),
                "warnings": _findings(made.findings),
            }
        )
        return status_of(made.findings)
    rows = []
    for name, size in found.skeleton.sizes.items():
        sd = size.sd or (math.nan,) * 3
        cells = [f"{f:.3f} ± {s:.3f}" for f, s in zip(size.factors, sd, strict=True)]
        length = f"{1000 * lengths[name]:.0f} mm" if name in lengths else ""
        rows.append((name, length, *cells))
    show_table("", ["segment", "length", "factor x", "factor y", "factor z"], rows)
    _show_known_better(found.known_better)
    start, end = found.still
    say(
        f"{len(found.markers)} markers placed from {start:.2f}-{end:.2f} s of {found.static}, "
        f"{1000 * rms:.1f} mm RMS from where the model expects them; up is {found.up} "
        f"({found.up_how})"
    )
    if found.movement is not None:
        used = found.movement
        say(
            f"{used.frames} of {used.of_all} frames of {', '.join(used.trials)} told joints and places; markers "
            f"are placed where they sit on average there"
        )
    if found.without_label:
        say(f"markers of the model without a label here: {', '.join(found.without_label)}")
    if found.other_labels:
        say(f"labels here that the model does not know: {', '.join(found.other_labels)}")
    show_findings(made.findings)
    say(f"{found.skeleton.name} sized -> {made.output}")
    return status_of(made.findings)


def _show_known_better(numbers: Sequence[KnownBetter]) -> None:
    """What was expected of the person's numbers and what is known now, the best known first."""
    rows = []
    for number in sorted(numbers, key=lambda n: n.after / n.before):
        times, unit = {"m": (1000, "mm"), "rad": (math.degrees(1), "deg"), "": (100, "%")}[
            number.unit
        ]
        before, after = (f"{times * sd:.1f} {unit}" for sd in (number.before, number.after))
        share = f"{100 * (number.after / number.before) ** 2:.0f} %"
        rows.append((number.name, before, after, share))
    title = "what recordings told: sd as the model expects, and now"
    show_table(title, ["number", "expected", "known", "left to the model"], rows)


def show_solved(run: Callable[[Watch], list[SolvedTrial]], *, as_json: bool) -> int:
    """Solve with a progress bar, then one line a trial."""
    with progress("fitting") as watch:
        solved = run(watch)
    if as_json:
        show_json({"trials": [_trial(trial) for trial in solved]})
    else:
        for trial in solved:
            say(trial_line(trial))
            show_findings(trial.findings)
        if backend().remark:
            say(backend().remark)
        say(CAUTION)
    return max(status_of(trial.findings) for trial in solved)


def _trial(trial: SolvedTrial) -> dict[str, Any]:
    whole = error_summary(trial.fit.motion.error, trial.fit.motion.used)
    return {
        "folder": str(trial.folder),
        "frames": len(trial.fit.motion.time),
        "rms_error": whole.rms,
        "largest_error": whole.largest,
        "converged": int(trial.fit.converged.sum()),
        "seconds": trial.seconds,
        "warnings": _findings(trial.findings),
    }


def trial_line(trial: SolvedTrial) -> str:
    """A solved trial in one line that can be quoted."""
    motion = trial.fit.motion
    whole = error_summary(motion.error, motion.used)
    return (
        f"{motion.name}: {len(motion.time)} frames in {trial.seconds:.1f} s, "
        f"RMS error {1000 * whole.rms:.1f} mm, largest {1000 * whole.largest:.0f} mm "
        f"-> {trial.folder}"
    )


def show_pictures(pictures: Pictures, *, as_json: bool) -> int:
    """The pictures written, and what is worth saying about them."""
    if as_json:
        show_json({"pictures": [str(path) for path in pictures.files], "notes": pictures.notes})
        return DONE
    for note in pictures.notes:
        say(f"note: {note}")
    for path in pictures.files:
        say(str(path))
    return DONE


def show_movies(run: Callable[[Watch], list[Movie]], *, as_json: bool) -> int:
    """Film with a progress bar, then one line a film."""
    with progress("filming") as watch:
        films = run(watch)
    if as_json:
        show_json({"movies": [asdict(film) for film in films]})
        return DONE
    for film in films:
        for note in film.notes:
            say(f"note: {note}")
        for file in film.files:
            say(f"{film.pictures} pictures, {film.seconds:.1f} s -> {file}")
    return DONE


def show_demo(run: Callable[[Watch], Demonstration], *, as_json: bool) -> int:
    """Run the demo with a progress bar, then its errors against the truth."""
    with progress("fitting") as watch:
        made = run(watch)
    if as_json:
        show_json(
            {
                "subject": str(made.subject.output),
                "trials": [_trial(trial) for trial in made.trials],
                "lengths": [asdict(error) for error in made.lengths],
                "angles": {
                    name: [asdict(error) for error in errors]
                    for name, errors in made.angles.items()
                },
                "pictures": [str(path) for path in made.pictures.files],
                "page": str(made.report.to_open),
            }
        )
        return DONE
    say("An invented orchard picker, sized from a static trial and fitted in two movements.")
    for trial in made.trials:
        say(trial_line(trial))
    rows = [
        (e.segment, f"{e.found_mm:.0f} mm", f"{e.true_mm:.0f} mm", f"{e.error_mm:+.1f} mm")
        for e in made.lengths
    ]
    show_table("lengths against the truth", ["segment", "sized", "true", "error"], rows)
    for name, errors in made.angles.items():
        show_table(
            f"{name}: errors against the truth",
            ["angle (both sides)", "RMS", "RMS about its mean", "inside ±1.96 sd"],
            [_angle_row(error) for error in errors],
        )
    say(
        "Within one trial errors of calibration are constant: a share far from 95 % says that this person's "
        "offset is small or large, not that the sd is wrong. Knees that turn about an axis of their own, as "
        "this person's do, are outside what any sd here knows."
    )
    show_pictures(made.pictures, as_json=False)
    say(CAUTION)
    say(f"open {made.report.to_open} in a browser")
    return DONE


def _angle_row(error: AngleErrors) -> tuple[str, str, str, str]:
    return (
        error.name,
        f"{error.rms:.2f} {error.unit}",
        f"{error.rms_about_bias:.2f} {error.unit}",
        f"{100 * error.covered:.0f} %",
    )


def show_exported(made: Exported, *, as_json: bool) -> int:
    """What was written for robotics tools, and what its reader must know."""
    if as_json:
        show_json({"files": [str(file) for file in made.files], "notes": list(made.notes)})
        return DONE
    for note in made.notes:
        say(f"note: {note}")
    say(made.summary)
    for file in made.files[1:]:
        say(str(file))
    return DONE
