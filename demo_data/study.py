"""The study as it ships: which files it has, and how they come into a user's folder."""

from __future__ import annotations

from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path

from condyle.model.whole_files import cannot_write, whole_file

MODEL = "full_body"
"""The shipped model that the study is for."""

STATIC = "static"
MOVEMENTS = ("step_up", "reach_aside")
PERSON_TRUTH = "truth_person.yaml"


@dataclass(frozen=True, slots=True)
class StudyTrial:
    """A recording and the truth behind it.

    Attributes
    ----------
    recording, truth : Path
        C3D; Parquet (`truth.read_truth`).
    """

    recording: Path
    truth: Path


@dataclass(frozen=True, slots=True)
class Study:
    """The demo study in a folder.

    Attributes
    ----------
    model : str
        A shipped model's name.
    static : StudyTrial
    trials : StudyTrials
    person_truth : Path
        YAML (`truth.read_person`).
    """

    model: str
    static: StudyTrial
    trials: tuple[StudyTrial, ...]
    person_truth: Path


def recording_file(trial: str) -> str:
    """The file name of a trial's recording."""
    return f"{trial}.c3d"


def truth_file(trial: str) -> str:
    """The file name of the truth behind a trial."""
    return f"truth_{trial}.parquet"


def copy_study(directory: Path) -> Study:
    """Copy the study's files into a folder, which is made where it does not exist.

    Raises
    ------
    CondyleError
        When the folder or a file cannot be written.
    """
    try:
        directory.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise cannot_write(directory, error) from error
    trials = [StudyTrial(*_copied(trial, directory)) for trial in (STATIC, *MOVEMENTS)]
    person = _copy(PERSON_TRUTH, directory)
    return Study(MODEL, trials[0], tuple(trials[1:]), person)


def _copied(trial: str, directory: Path) -> tuple[Path, Path]:
    return _copy(recording_file(trial), directory), _copy(truth_file(trial), directory)


def _copy(name: str, directory: Path) -> Path:
    with whole_file(directory / name) as beside:
        beside.write_bytes(files(__package__).joinpath(name).read_bytes())
    return directory / name
