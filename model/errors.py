"""What a person is told when their input is wrong: the place, the fault, and the remedy.

Everything that is the input's fault derives from :class:`CondyleError`; the command line prints it
without a traceback and exits with status 2. Every other exception is a defect of ours.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path


class CondyleError(Exception):
    """The input is at fault; the message says what is wrong and what would be right."""


class RecordingError(CondyleError):
    """A recording cannot be read, or holds nothing that can be used."""


class FitError(CondyleError):
    """A model and a recording, each sound by itself, cannot be brought together."""


@dataclass(frozen=True, slots=True, order=True)
class Mistake:
    """One thing wrong with a file.

    Attributes
    ----------
    file : str
        The file as the user named it.
    line : int
        Counted from 1.
    problem, remedy : str
        What is wrong; what would be right.
    """

    file: str
    line: int
    problem: str
    remedy: str

    def __str__(self) -> str:
        return f"{self.file}:{self.line}: {self.problem}\n  {self.remedy}"


class ModelError(CondyleError):
    """Every mistake of a model file, in one report ordered by file and line."""

    def __init__(self, mistakes: Sequence[Mistake]) -> None:
        self.mistakes = tuple(sorted(set(mistakes)))
        super().__init__("\n".join(str(mistake) for mistake in self.mistakes))


def unknown_name(file: Path, line: int, kind: str, name: str, known: Iterable[str]) -> Mistake:
    """The mistake of a name that refers to nothing, with the nearest real one."""
    names = sorted(known)
    near = get_close_matches(name, names, n=1)
    hint = f"Did you mean '{near[0]}'? " if near else ""
    listed = ", ".join(names) if names else "none"
    return Mistake(
        str(file),
        line,
        f"no {kind} is called '{name}'.",
        f"{hint}The {kind}s defined here: {listed}.",
    )
