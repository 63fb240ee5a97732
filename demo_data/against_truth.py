"""How far what was found lies from the truth, and whether the stated uncertainty covers it.

Only a study whose truth is known can say this. A fit's sd counts the marker error that the model
expects, not the errors of sizing, so the share covered may well lie below 95 %; it is shown, not
mended.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.demo_data.truth import PersonTruth, TrialTruth
from condyle.model.growth import sized_lengths
from condyle.model.skeleton import Skeleton
from condyle.solver.results import TrialFit

FloatArray = NDArray[np.float64]

COVERAGE_SDS = 1.96
"""Standard deviations to either side that hold 95 % of a normal error."""

MM_PER_M = 1000.0


@dataclass(frozen=True, slots=True)
class AngleErrors:
    """Errors of one coordinate or angle over a trial, both sides together.

    Attributes
    ----------
    name : str
        Without ``_right`` or ``_left``.
    unit : "deg" or "mm"
    rms : float
        Over all frames in which the number was determined.
    bias : float
        Mean error, found minus true; of two sides the one further from 0.
    rms_about_bias : float
        RMS with each side's own mean error removed: the error in the shape of the curve.
    covered : float
        Share of frames in which the truth lies within 1.96 sd.
    frames : int
        How many frames were compared; of both sides, their sum.
    """

    name: str
    unit: str
    rms: float
    bias: float
    rms_about_bias: float
    covered: float
    frames: int


@dataclass(frozen=True, slots=True)
class LengthError:
    """What a tape would measure on a segment: as sized, and truly; mm."""

    segment: str
    found_mm: float
    true_mm: float

    @property
    def error_mm(self) -> float:
        """Found minus true."""
        return self.found_mm - self.true_mm


def compare_with_truth(fit: TrialFit, truth: TrialTruth) -> tuple[AngleErrors, ...]:
    """Errors of every coordinate and reported angle that both have, in the fit's order.

    Sums that stand in for singular sequences are left out, and so is whatever was never determined.

    Raises
    ------
    ValueError
        If the truth lacks a frame of the fit.
    """
    rows = np.searchsorted(truth.frame, fit.motion.frame)
    if (rows == len(truth.frame)).any() or (truth.frame[rows] != fit.motion.frame).any():
        raise ValueError("the truth lacks frames of this trial")
    groups: dict[str, list[int]] = {}
    for i, column in enumerate(fit.columns):
        if column.name in truth.values and not column.name.endswith("_sum"):
            groups.setdefault(without_side(column.name), []).append(i)
    found = [_group_errors(name, columns, fit, truth, rows) for name, columns in groups.items()]
    return tuple(errors for errors in found if errors.frames)


def compare_lengths(skeleton: Skeleton, truth: PersonTruth) -> tuple[LengthError, ...]:
    """Segment lengths of a sized skeleton beside the true ones; a segment without length is left out."""
    return tuple(
        LengthError(segment, MM_PER_M * length, MM_PER_M * truth.lengths[segment])
        for segment, length in sized_lengths(skeleton).items()
        if truth.lengths.get(segment, 0.0) > 0
    )


def without_side(name: str) -> str:
    """A coordinate's name without its side."""
    return name.removesuffix("_right").removesuffix("_left")


def _group_errors(
    name: str, columns: list[int], fit: TrialFit, truth: TrialTruth, rows: NDArray[np.int64]
) -> AngleErrors:
    errors, shapes, within, biases = [], [], [], [0.0]
    in_metres = fit.columns[columns[0]].unit == "m"
    for i in columns:
        error = fit.values[:, i] - truth.values[fit.columns[i].name][rows]
        if not in_metres:
            error = (error + np.pi) % (2 * np.pi) - np.pi
        known = np.isfinite(fit.sd[:, i]) & np.isfinite(error)
        if known.any():
            error, sd = error[known], fit.sd[known, i]
            errors.append(error)
            shapes.append(error - error.mean())
            within.append(np.abs(error) <= COVERAGE_SDS * sd)
            biases.append(float(error.mean()))
    shown = MM_PER_M if in_metres else float(np.rad2deg(1.0))
    return AngleErrors(
        name=name,
        unit="mm" if in_metres else "deg",
        rms=shown * _rms(errors),
        bias=shown * max(biases, key=abs),
        rms_about_bias=shown * _rms(shapes),
        covered=float(np.concatenate(within).mean()) if within else float("nan"),
        frames=sum(map(len, errors)),
    )


def _rms(pieces: list[FloatArray]) -> float:
    return float(np.sqrt(np.mean(np.concatenate(pieces) ** 2))) if pieces else float("nan")
