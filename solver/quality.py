"""Whether a fit needs a look, and what to do about it: findings in words, from the numbers.

The two limits that make a fit `needs a look` are settings, common practice for skin markers.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.results import Calibration, TrialFit

FloatArray = NDArray[np.float64]

RMS_LIMIT = 0.02
"""m; a whole-trial RMS error above it needs a look."""
MARKER_LIMIT, MARKER_SHARE = 0.04, 0.01
"""m and share of frames; a marker off by more in more frames needs a look."""
LIMIT_SHARE = 0.05
"""Share of frames at a limit above which it is worth saying."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing worth saying about a result.

    Attributes
    ----------
    what, do : str
        What was found; what to do about it.
    needs_look : bool
        Whether it makes the command end with status 1.
    """

    what: str
    do: str
    needs_look: bool = False


@dataclass(frozen=True, slots=True)
class ErrorSummary:
    """RMS and largest error (m) of some markers, and over how many marker-frames."""

    rms: float
    largest: float
    count: int


def error_summary(error: FloatArray, used: NDArray[np.bool_]) -> ErrorSummary:
    """The errors of used marker-frames; NaN where there is none."""
    chosen = error[used]
    if not len(chosen):
        return ErrorSummary(float("nan"), float("nan"), 0)
    return ErrorSummary(float(np.sqrt(np.mean(chosen**2))), float(chosen.max()), len(chosen))


def trial_findings(fit: TrialFit) -> list[Finding]:
    """What is worth saying about a fitted trial, the gravest first."""
    return [*_bad_fit(fit), *_bad_markers(fit), *_not_converged(fit), *_limits(fit), *_unseen(fit)]


def _bad_fit(fit: TrialFit) -> list[Finding]:
    rms = fit.rms()
    if not np.isfinite(rms):
        return [
            Finding(
                "no marker took part in the fit",
                "check the labels: condyle recording lists them",
                needs_look=True,
            )
        ]
    if rms <= RMS_LIMIT:
        return []
    return [
        Finding(
            f"RMS error {1000 * rms:.1f} mm exceeds {1000 * RMS_LIMIT:.0f} mm",
            "look at the picture of the worst frame: a marker with the wrong name, a wrong static "
            "or a wrong up axis shows there",
            needs_look=True,
        )
    ]


def _bad_markers(fit: TrialFit) -> list[Finding]:
    motion, found = fit.motion, []
    error = np.where(motion.used, motion.error, 0.0)
    for i, name in enumerate(motion.marker_names):
        frames = int(motion.used[:, i].sum())
        far = int((error[:, i] > MARKER_LIMIT).sum())
        if frames and far > MARKER_SHARE * frames:
            found.append(
                Finding(
                    f"marker {name} is more than {1000 * MARKER_LIMIT:.0f} mm off in {far} of "
                    f"{frames} frames (largest {1000 * error[:, i].max():.0f} mm, frame "
                    f"{motion.frame[int(error[:, i].argmax())]})",
                    "look whether it slid, was exchanged with another, or sits elsewhere than in "
                    "the static",
                    needs_look=True,
                )
            )
    return found


def _not_converged(fit: TrialFit) -> list[Finding]:
    count = int((~fit.converged).sum())
    if not count:
        return []
    first = fit.motion.frame[int(np.flatnonzero(~fit.converged)[0])]
    return [
        Finding(
            f"{count} frames did not converge, the first is frame {first}",
            "treat them as missing; look at their markers",
            needs_look=True,
        )
    ]


def _limits(fit: TrialFit) -> list[Finding]:
    share = fit.at_limit.mean(axis=0)
    return [
        Finding(
            f"{column.name} is at a limit of its range in {100 * s:.0f} % of the frames",
            "if this person really moves that far, widen the range in the model; else look at the "
            "markers near that joint",
        )
        for column, s in zip(fit.columns, share, strict=True)
        if s > LIMIT_SHARE
    ]


def _unseen(fit: TrialFit) -> list[Finding]:
    frames, found = len(fit.motion.time), []
    for name, count in fit.not_observed.items():
        where = "any frame" if count == frames else f"{count} of {frames} frames"
        found.append(
            Finding(
                f"{name} is not determined by the markers in {where}",
                "its value there is the model's rest, not a measurement (its sd is empty)",
            )
        )
    return found


def calibration_findings(calibration: Calibration) -> list[Finding]:
    """What is worth saying about a calibration."""
    found = []
    if not calibration.converged:
        found.append(
            Finding(
                "the calibration did not converge",
                "look at the static trial: condyle recording shows its markers",
                needs_look=True,
            )
        )
    found += [Finding(f.what, f.do, needs_look=f.grave) for f in calibration.faults]
    if calibration.undetermined:
        found.append(
            Finding(
                f"nothing in the static determines {', '.join(calibration.undetermined)}",
                "its zero is the model's; add a marker, or an expectation under sizing: standing",
            )
        )
    return found
