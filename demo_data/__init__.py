"""The demo study: an invented person, invented movements, known truth. Licence: as the project.

`python -m condyle.demo_data.make` writes every file of the study anew from the sources here; the
files that ship are what it wrote.
"""

from condyle.demo_data.against_truth import (
    AngleErrors,
    LengthError,
    compare_lengths,
    compare_with_truth,
)
from condyle.demo_data.study import Study, StudyTrial, copy_study
from condyle.demo_data.truth import PersonTruth, TrialTruth, read_person, read_truth

__all__ = [
    "AngleErrors",
    "LengthError",
    "PersonTruth",
    "Study",
    "StudyTrial",
    "TrialTruth",
    "compare_lengths",
    "compare_with_truth",
    "copy_study",
    "read_person",
    "read_truth",
]
