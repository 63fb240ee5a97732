"""What fitting gives back: small frozen things that say their shapes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from condyle.model.meshes import GrownShape
from condyle.model.skeleton import Skeleton, Vector
from condyle.solver.posture import Posture
from condyle.solver.subject_covariance import SubjectCovariance

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class FittedMotion:
    """The fitted skeleton over a trial with the markers it was fitted to: what a picture needs.

    Attributes
    ----------
    name : str
        The trial's name.
    frame : (frames,) int, time : (frames,) s
    up : str
        The laboratory axis that points up, such as ``+Y``.
    up_how : str
        How that was chosen.
    segment_names : (segments,) str
    laboratory_from_segment : (frames, segments, 4, 4)
        m; homogeneous poses, columns on the right.
    marker_names : (markers,) str
    measured, fitted : (frames, markers, 3) m
        Laboratory axes; measured is NaN where missing.
    used : (frames, markers) bool
        Whether the marker took part in the fit of that frame.
    joint_centres : segment -> child segment -> (3,) m
        The joint centres of its children, in the sized segment.
    landmarks : segment -> name -> (3,) m
        In the sized segment.
    shapes : segment -> GrownShapes
        The meshes that the model draws on it, with its growth; only segments that have some.
    """

    name: str
    frame: NDArray[np.int64]
    time: FloatArray
    up: str
    segment_names: tuple[str, ...]
    laboratory_from_segment: FloatArray
    marker_names: tuple[str, ...]
    measured: FloatArray
    fitted: FloatArray
    used: BoolArray
    joint_centres: Mapping[str, Mapping[str, FloatArray]]
    landmarks: Mapping[str, Mapping[str, FloatArray]]
    up_how: str = ""
    shapes: Mapping[str, tuple[GrownShape, ...]] = field(default_factory=dict)

    @property
    def error(self) -> FloatArray:
        """(frames, markers) m, distance from measured to fitted; NaN where missing."""
        return np.asarray(np.linalg.norm(self.measured - self.fitted, axis=2))

    def rms_of_frames(self) -> FloatArray:
        """(frames,) m, RMS error over the used markers; NaN where a frame has none."""
        squared = np.where(self.used, self.error**2, np.nan)
        count = self.used.sum(axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.nansum(squared, axis=1) / np.where(count, count, np.nan)
            return np.asarray(np.sqrt(mean))


@dataclass(frozen=True, slots=True)
class Column:
    """One reported number: a coordinate, an angle of an orientation, or such an angle's sum.

    Attributes
    ----------
    name : str
    unit : "rad" or "m"
    meaning : str
        A sentence for `columns.csv`.
    has_range : bool
        Whether it has limits, so that being at one can be said.
    """

    name: str
    unit: str
    meaning: str
    has_range: bool


@dataclass(frozen=True, slots=True)
class TimeDerivatives:
    """How fast everything goes; part of the same estimate as the values.

    Attributes
    ----------
    rates, rates_sd : (frames, columns) rad/s or m/s
    accelerations, accelerations_sd : (frames, columns) rad/s^2 or m/s^2
        NaN where undetermined, and near the singularity of a reported sequence.
    linear, angular : (frames, segments, 3) m/s and rad/s
        Of the segments' origins and of the segments, in laboratory axes; NaN in the frames in which
        an undetermined coordinate jumps to rest or back.
    """

    rates: FloatArray
    rates_sd: FloatArray
    accelerations: FloatArray
    accelerations_sd: FloatArray
    linear: FloatArray
    angular: FloatArray


@dataclass(frozen=True, slots=True)
class Smoothing:
    """How a trial was estimated as a whole.

    Attributes
    ----------
    order : int
        Of the differences taken to be white: 3 is white jerk, 4 white snap.
    white_noise : float
        m; the markers' white noise as read from the trial, the median over the freedoms.
    rounds : int
    bridged : column -> number of frames told from their neighbours alone
    """

    order: int
    white_noise: float
    rounds: int
    bridged: Mapping[str, int]


@dataclass(frozen=True, slots=True)
class DoubtShares:
    """Which parts of a number's variance come from where: medians over the frames, together about 1.

    Attributes
    ----------
    white : of noise that neighbouring frames make smaller; NaN where each frame is by itself
    persisting : of the markers' remaining error, skin above all
    calibration : of sizes and marker places
    """

    white: float
    persisting: float
    calibration: float

    def dominant(self) -> str:
        """The largest part, in words."""
        parts = {
            "white noise": self.white,
            "markers, skin above all": self.persisting,
            "calibration": self.calibration,
        }
        return max(parts, key=lambda name: np.nan_to_num(parts[name]))


@dataclass(frozen=True, slots=True)
class TrialFit:
    """Joint coordinates fitted to one recording, with how well they explain it.

    Attributes
    ----------
    motion : FittedMotion
        Time, poses, measured and fitted markers.
    rate : float
        Frames per second.
    columns : what the columns of the next three are
    values, sd : (frames, columns) rad or m
        sd is NaN where undetermined, 0 where held; the value is then at rest or as held.
    at_limit : (frames, columns) bool
    why_not : (frames, markers) str
        Empty where used.
    other_labels : labels of the recording that the model does not know
    other_positions : (frames, other labels, 3) m
    cost, optimality : (frames,)
        Half the weighted sum of squares; the projected gradient in standard deviations.
    iterations : (frames,) int
    converged : (frames,) bool
    not_observed : column -> number of frames in which nothing determined it
    freedoms, freedoms_tied : int
        Of the skeleton without its ties; how many the ties take away.
    tie_errors : tie -> largest departure over the trial, m
    derivatives : TimeDerivatives or None
        Only where the trial was estimated as a whole.
    smoothing : Smoothing or None
        Likewise; None where each frame was fitted by itself.
    doubts : column -> DoubtShares
        Only numbers that have an sd.
    calibration_how : str
        What the part of calibration rests on.
    covariance : (frames, columns, columns) float32, or None
        Of the numbers of each frame together; NaN where undetermined. Only where it was asked for.
    """

    motion: FittedMotion
    rate: float
    columns: tuple[Column, ...]
    values: FloatArray
    sd: FloatArray
    at_limit: BoolArray
    why_not: NDArray[np.str_]
    other_labels: tuple[str, ...]
    other_positions: FloatArray
    cost: FloatArray
    optimality: FloatArray
    iterations: NDArray[np.int64]
    converged: BoolArray
    not_observed: Mapping[str, int]
    freedoms: int
    freedoms_tied: int
    tie_errors: Mapping[str, float]
    derivatives: TimeDerivatives | None = None
    smoothing: Smoothing | None = None
    doubts: Mapping[str, DoubtShares] = field(default_factory=dict)
    calibration_how: str = ""
    covariance: NDArray[np.float32] | None = None

    def __post_init__(self) -> None:
        frames = len(self.motion.time)
        for name in ("values", "sd", "at_limit", "why_not", "cost", "converged"):
            if len(getattr(self, name)) != frames:
                raise ValueError(f"{name} has not the {frames} frames of the trial")

    def column(self, name: str) -> int:
        """Where a column stands."""
        return next(i for i, column in enumerate(self.columns) if column.name == name)

    def rms(self) -> float:
        """RMS error (m) over all used marker-frames; NaN where none was used."""
        used = self.motion.used
        return float(np.sqrt(np.mean(self.motion.error[used] ** 2))) if used.any() else float("nan")


@dataclass(frozen=True, slots=True)
class PlacedMarker:
    """Where calibration found a marker, in its sized segment.

    Attributes
    ----------
    placed, placed_sd : (x, y, z) m
    departure : (x, y, z) m or None
        From the grown nominal place; None where the model names no place.
    placed_within : float or None
        m per axis: how far it was expected to depart.
    """

    name: str
    placed: Vector
    placed_sd: Vector
    departure: Vector | None
    placed_within: float | None


@dataclass(frozen=True, slots=True)
class Fault:
    """Something of a static that must not be absorbed into sizes, or that is worth saying.

    Attributes
    ----------
    what, do : str
    grave : bool
        Whether the calibration needs a look.
    """

    what: str
    do: str
    grave: bool = False


@dataclass(frozen=True, slots=True)
class KnownBetter:
    """One number of a person: what was expected of it, and what is known now.

    Attributes
    ----------
    name : str
    unit : "m", "rad" or "" (ln of a factor)
    before, after : float
        sd of what the model expects, and of the estimate.
    """

    name: str
    unit: str
    before: float
    after: float


@dataclass(frozen=True, slots=True)
class MovementUsed:
    """What a calibration took from trials of movement.

    Attributes
    ----------
    trials : names
    frames, of_all : how many frames were used, of how many
    errors : marker -> m
        RMS distance that neither skeleton nor skin explains.
    left_out : marker -> frames in which it was too far off to be believed
    """

    trials: tuple[str, ...]
    frames: int
    of_all: int
    errors: Mapping[str, float]
    left_out: Mapping[str, int]


@dataclass(frozen=True, slots=True)
class Calibration:
    """A skeleton sized to one person, and what that rests on.

    Attributes
    ----------
    skeleton : Skeleton
        Sized: with factors, placed markers, label map and up axis.
    static : str
        The static's name.
    still : (start, end) s
    up, up_how : str
    log_scale : float
        ln of the person's overall scale beside the reference person.
    posture : name -> rad or m
        Every reported number in the static.
    undetermined : names that neither markers nor expectations determine
    markers : PlacedMarkers
    without_label, other_labels : markers without a label; labels without a marker
    cost : float
    converged : bool
    own_posture : Posture
        One frame: the static's.
    covariance : SubjectCovariance
        Of sizes, marker places and freed joints together.
    known_better : KnownBetters
    movement : MovementUsed or None
        None where only a static served.
    faults : Faults
        Of the static.
    """

    skeleton: Skeleton
    static: str
    still: tuple[float, float]
    up: str
    up_how: str
    log_scale: float
    posture: Mapping[str, float]
    undetermined: tuple[str, ...]
    markers: tuple[PlacedMarker, ...]
    without_label: tuple[str, ...]
    other_labels: tuple[str, ...]
    cost: float
    converged: bool
    own_posture: Posture
    covariance: SubjectCovariance
    known_better: tuple[KnownBetter, ...] = ()
    movement: MovementUsed | None = None
    faults: tuple[Fault, ...] = ()
