"""The figures of one frame, in the words that a picture prints, and which frame to look at.

A frame is told by its markers used, missing and left out, its RMS error over the used ones, and
the worst of them by name. All of it is counted from the motion here, never passed along.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from condyle.model.errors import CondyleError
from condyle.recording.recording import is_seen
from condyle.solver.results import FittedMotion

CAUTION = "A measuring aid, not a diagnosis."


class NoFrameError(CondyleError):
    """No frame of the trial can be chosen, because no marker was used in any."""


@dataclass(frozen=True, slots=True)
class FrameFigures:
    """One frame in numbers.

    Attributes
    ----------
    used, missing, left_out : int
        Markers in the fit; not measured here though elsewhere in the trial; measured but kept out
        of the fit.
    rms_mm : float
        NaN where no marker was used.
    worst : str, worst_mm : float
        The used marker with the largest error; empty and NaN where none was used.
    """

    time: float
    frame: int
    used: int
    missing: int
    left_out: int
    rms_mm: float
    worst: str
    worst_mm: float

    def line(self) -> str:
        """One line for a person to read."""
        return "  ·  ".join(self.parts())

    def parts(self) -> list[str]:
        """The parts of that line."""
        parts = [f"t = {self.time:.2f} s, frame {self.frame}", f"{counted(self.used)} used"]
        parts += [f"{self.missing} missing"] if self.missing else []
        parts += [f"{self.left_out} left out"] if self.left_out else []
        if self.used:
            parts += [f"RMS residual {self.rms_mm:.1f} mm"]
            parts += [f"worst {self.worst} {self.worst_mm:.1f} mm"]
        return parts


def counted(markers: int) -> str:
    """The number with its noun: `1 marker`, `2 markers`, `no marker`."""
    return "no marker" if markers == 0 else f"{markers} marker{'s' if markers > 1 else ''}"


def frame_figures(motion: FittedMotion, row: int) -> FrameFigures:
    """Count and measure one row."""
    error = motion.error[row]
    seen = is_seen(motion.measured[row])
    used = motion.used[row] & np.isfinite(error)
    worst = int(np.argmax(np.where(used, error, -1.0))) if used.any() else None
    return FrameFigures(
        time=float(motion.time[row]),
        frame=int(motion.frame[row]),
        used=int(used.sum()),
        missing=int((~seen & is_seen(motion.measured).any(axis=0)).sum()),
        left_out=int((seen & ~used).sum()),
        rms_mm=float(1000.0 * np.sqrt(np.mean(error[used] ** 2))) if used.any() else np.nan,
        worst="" if worst is None else motion.marker_names[worst],
        worst_mm=np.nan if worst is None else float(1000.0 * error[worst]),
    )


def worst_row(motion: FittedMotion) -> int:
    """The row with the largest RMS error; raises NoFrameError where no row has one."""
    return int(np.nanargmax(finite_rms(motion)))


def best_row(motion: FittedMotion) -> int:
    """The row with the smallest RMS error; raises NoFrameError where no row has one."""
    return int(np.nanargmin(finite_rms(motion)))


def typical_row(motion: FittedMotion) -> int:
    """The first row whose RMS error is nearest the trial's median.

    Raises
    ------
    NoFrameError
        Where no row has an RMS error.
    """
    rms = finite_rms(motion)
    return int(np.nanargmin(np.abs(rms - np.nanmedian(rms))))


def finite_rms(motion: FittedMotion) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """(frames,) m, with at least one finite value."""
    rms = motion.rms_of_frames()
    if not np.isfinite(rms).any():
        raise NoFrameError(
            f"no frame of '{motion.name}' can be chosen: no marker was used in any of its frames."
        )
    return rms
