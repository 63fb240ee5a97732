"""The demo study from end to end: copy, calibrate, solve, draw, and hold against the known truth."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from condyle.demo_data import (
    AngleErrors,
    LengthError,
    Study,
    compare_lengths,
    compare_with_truth,
    copy_study,
    read_person,
    read_truth,
)
from condyle.model.whole_files import cannot_write
from condyle.picturing import Pictures, picture
from condyle.pipeline import SizedSubject, SolvedTrial, calibrate, solve
from condyle.reporting import Report, report


@dataclass(frozen=True, slots=True)
class Demonstration:
    """What the demo made.

    Attributes
    ----------
    study : Study
        The files copied.
    subject : SizedSubject
    trials : SolvedTrials
    lengths : sized lengths against the truth
    angles : trial name -> errors of each angle, both sides together
    pictures : Pictures
        Without files, and with a note, where this machine cannot draw.
    report : Report
        The pages to open.
    """

    study: Study
    subject: SizedSubject
    trials: list[SolvedTrial]
    lengths: tuple[LengthError, ...]
    angles: dict[str, tuple[AngleErrors, ...]]
    pictures: Pictures
    report: Report


def demo(
    directory: str | Path, *, watch: Callable[[str, float], None] | None = None
) -> Demonstration:
    """Write the demo study into a folder and run all of it.

    Parameters
    ----------
    directory : path
        Made if it is not there; results of an earlier demo are replaced.
    watch : callable, optional
        Told a trial's name and the share of its work done.

    Raises
    ------
    CondyleError
        If the folder cannot be written.
    """
    folder = Path(directory)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        raise cannot_write(folder, fault) from fault
    study = copy_study(folder)
    person = read_person(study.person_truth)
    subject = calibrate(
        study.model,
        study.static.recording,
        folder / "subject.yaml",
        mass=person.person.mass,
        stature=person.person.stature,
    )
    recordings = [trial.recording for trial in study.trials]
    trials = solve(subject.output, recordings, folder / "results", watch=watch)
    pictures = _pictures(folder / "results")
    pages = report(folder / "results")
    angles = {
        solved.fit.motion.name: compare_with_truth(solved.fit, read_truth(trial.truth))
        for trial, solved in zip(study.trials, trials, strict=True)
    }
    lengths = compare_lengths(subject.calibration.skeleton, person)
    return Demonstration(study, subject, trials, lengths, angles, pictures, pages)


def _pictures(results: Path) -> Pictures:
    """The demo's pictures; a machine that cannot draw does the rest all the same."""
    from condyle.viz.offscreen import NoGraphicsError

    try:
        return picture(results)
    except NoGraphicsError as fault:
        return Pictures([], [str(fault)])
