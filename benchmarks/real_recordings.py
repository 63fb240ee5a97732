"""How well a chain sized from the static alone explains real recordings that nobody here made.

Usage: python benchmarks/real_recordings.py [DATA_FOLDER]

The folder holds open data (see its own README): `treadmill-walk` (Fukuchi, Fukuchi & Duarte 2018,
PeerJ 6:e4640), `plate-run` (Ferber et al. 2024, Scientific Data) and `box-lift` (2017,
doi:10.3389/frobt.2017.00041), and for all the angles that a separate program computed segment by
segment, without a chain. Each figure is printed beside what it was asked to reach; a miss is
printed as a miss.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from time import perf_counter

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.skeleton import AngleReport
from condyle.recording import read_label_map, read_recording
from condyle.recording.recording import Recording, is_seen
from condyle.solver.calibration import calibrate
from condyle.solver.joint_angles import report_angles
from condyle.solver.matching import match_markers
from condyle.solver.results import Calibration, TrialFit
from condyle.solver.trial_fit import fit_trial

ROOT = Path(__file__).resolve().parents[1]
FloatArray = NDArray[np.float64]

CARDAN = AngleReport((2, 0, 1), (1, 1, 1), ("flexion", "adduction", "rotation"))
"""Z-X-Y, as the separate program tells its angles (Grood & Suntay 1983; Wu et al. 2002)."""

ANGLES = {
    "hip_flexion": ("pelvis", "thigh", 1, 3.5),
    "knee_flexion": ("thigh", "shank", -1, 3.5),
    "ankle_dorsiflexion": ("shank", "foot", 1, 4.0),
}
"""Parent, child, clinical sign of the first Z-X-Y angle, and the RMS difference asked for (deg)."""


SIDES = ("right", "left")

AC_WITHOUT_CLAVICLES = 32.0
"""mm; the least error at the AC markers of `box-lift` that arms straight on the trunk left (32 to 41)."""


@dataclass(frozen=True)
class Study:
    """One folder of recordings, the model for it, and what was asked for."""

    folder: str
    model: str
    static: str
    trial: str
    labels: str | None
    rms_mm: float


STUDIES = (
    Study("treadmill-walk", "lower_limbs", "static.c3d", "walk.c3d", None, 8.0),
    Study(
        "plate-run",
        str(ROOT / "docs/examples/plate_run.yaml"),
        "static.c3d",
        "run.c3d",
        str(ROOT / "docs/examples/plate_run_labels.yaml"),
        13.0,
    ),
    Study("box-lift", "full_body", "stand.c3d", "lift.c3d", None, 13.0),
)


def verdict(value: float, limit: float, *, above: bool = False) -> str:
    """The value beside its limit, and whether it is met."""
    met = value >= limit if above else value <= limit
    return f"{value:8.2f}   {'at least' if above else 'at most'} {limit:g}: {'met' if met else 'MISSED'}"


def same_angle(fit: TrialFit, parent: str, child: str, sign: int) -> FloatArray:
    """(frames,) deg, first Z-X-Y angle between two fitted segments: the reference's own definition."""
    names, poses = fit.motion.segment_names, fit.motion.laboratory_from_segment
    of_parent = poses[:, names.index(parent), :3, :3]
    of_child = poses[:, names.index(child), :3, :3]
    relative = np.swapaxes(of_parent, 1, 2) @ of_child
    return np.degrees(sign * report_angles(relative, CARDAN).values[:, 0])


def compare_angles(fit: TrialFit, reference: pd.DataFrame) -> None:
    """RMS difference to the segment-by-segment angles, mean removed."""
    print(
        "  angle                        same definition (Z-X-Y of the fitted segments)   coordinate"
    )
    for angle, (parent, child, sign, limit) in ANGLES.items():
        for side in ("right", "left"):
            name = f"{angle}_{side}"
            upper = parent if parent == "pelvis" else f"{parent}_{side}"
            expected = reference[name].to_numpy()
            alike = same_angle(fit, upper, f"{child}_{side}", sign)
            own = np.degrees(fit.values[:, fit.column(name)])
            of_alike, of_own = np.std(alike - expected), np.std(own - expected)
            print(f"  {name:26s} {verdict(of_alike, limit)} deg {of_own:12.2f} deg")


def swing_peaks(fit: TrialFit, recording: Recording) -> None:
    """Largest knee flexion between successive heel strikes of each side."""
    for side, event in (("right", "RHS"), ("left", "LHS")):
        strikes = sorted(e.time for e in recording.events if e.label == event)
        knee = np.degrees(fit.values[:, fit.column(f"knee_flexion_{side}")])
        time = fit.motion.time
        peaks = [knee[(time >= a) & (time < b)].max() for a, b in pairwise(strikes)]
        met = all(45 <= peak <= 65 for peak in peaks)
        print(
            f"  knee swing peak, {side:5s}  {min(peaks):.1f} to {max(peaks):.1f} deg in "
            f"{len(peaks)} strides   45 to 65 in every stride: {'met' if met else 'MISSED'}"
        )


def shoulders(fit: TrialFit) -> None:
    """RMS error of the AC markers, which only a shoulder girdle lets follow the arms."""
    for side in SIDES:
        row = fit.motion.marker_names.index(f"AC_{side}")
        error = np.linalg.norm(fit.motion.measured[:, row] - fit.motion.fitted[:, row], axis=1)
        rms = 1000 * float(np.sqrt(np.nanmean(error**2)))
        print(f"  AC_{side:5s} RMS error         {verdict(rms, AC_WITHOUT_CLAVICLES)} mm")


def marker(calibration: Calibration, name: str) -> FloatArray:
    """(3,) m, a placed marker in its sized segment."""
    return np.array(next(m.placed for m in calibration.markers if m.name == name))


def lengths(calibration: Calibration, static: FloatArray) -> None:
    """Sized lengths beside the same lengths between the static's markers."""
    skeleton = calibration.skeleton
    names = skeleton.marker_names
    factor = {name: np.array(size.factors) for name, size in skeleton.sizes.items()}
    medial = [names.index(f"{name}_{side}") for name in ("FE_medial", "MM") for side in SIDES]
    if not np.isfinite(static[medial]).all():
        print("  knee to ankle: not checked, this static has no medial markers")
    for side in SIDES if np.isfinite(static[medial]).all() else ():
        knee = (
            static[names.index(f"FE_lateral_{side}")] + static[names.index(f"FE_medial_{side}")]
        ) / 2
        ankle = (static[names.index(f"LM_{side}")] + static[names.index(f"MM_{side}")]) / 2
        joint = next(j for j in skeleton.joints if j.name == f"ankle_{side}")
        sized = np.linalg.norm(factor[f"shank_{side}"] * np.array(joint.at))
        off = 1000 * abs(sized - np.linalg.norm(knee - ankle))
        print(
            f"  knee to ankle, {side:5s} {1000 * sized:6.0f} mm sized, off by {verdict(off, 10)} mm"
        )
    if not {"ASIS_right", "ASIS_left"} <= {m.name for m in calibration.markers}:
        return
    width = np.linalg.norm(static[names.index("ASIS_right")] - static[names.index("ASIS_left")])
    placed = np.linalg.norm(marker(calibration, "ASIS_right") - marker(calibration, "ASIS_left"))
    off = 1000 * abs(placed - width)
    print(
        f"  ASIS to ASIS, markers as placed {1000 * placed:4.0f} mm, off by {verdict(off, 10)} mm"
    )
    pelvis = next(s for s in skeleton.segments if s.name == "pelvis")
    bone = np.array(pelvis.landmarks["ASIS_right"]) - np.array(pelvis.landmarks["ASIS_left"])
    grown = np.linalg.norm(factor["pelvis"] * bone)
    off = 1000 * abs(grown - width)
    print(f"  ASIS to ASIS, bone as grown     {1000 * grown:4.0f} mm, off by {verdict(off, 10)} mm")


def run(study: Study, data: Path) -> None:
    """Calibrate, solve and print everything."""
    folder = data / study.folder
    skeleton = load_skeleton(study.model)
    label_map = read_label_map(Path(study.labels)) if study.labels else None
    static, trial = read_recording(folder / study.static), read_recording(folder / study.trial)
    began = perf_counter()
    calibration = calibrate(skeleton, static, labels=label_map)
    sized = perf_counter() - began
    began = perf_counter()
    fit = fit_trial(calibration.skeleton, trial, smooth=True)
    seconds = perf_counter() - began
    motion = fit.motion
    print(f"{study.folder}: static in ({sized:.1f} s), {len(trial)} frames out in {seconds:.1f} s")
    print(f"  RMS error                  {verdict(1000 * fit.rms(), study.rms_mm)} mm")
    present = is_seen(motion.measured) & is_seen(motion.fitted)
    used = 100 * motion.used.sum() / present.sum()
    print(f"  present marker-frames used {verdict(used, 98, above=True)} %")
    print(f"  frames converged           {100 * fit.converged.mean():8.2f} %")
    print(f"  largest projected gradient {fit.optimality.max():8.1e}")
    if study.folder == "treadmill-walk":
        swing_peaks(fit, trial)
    if study.folder == "box-lift":
        shoulders(fit)
    lengths(calibration, _mean_in_order(calibration, static))
    compare_angles(fit, pd.read_csv(data / "segment-angles" / f"{study.folder}.csv"))


def _mean_in_order(calibration: Calibration, static: Recording) -> FloatArray:
    """(markers, 3) The static's mean positions in the model's order; NaN without a label."""
    positions = match_markers(calibration.skeleton, static).positions
    seen = is_seen(positions)
    total = np.where(seen[..., None], positions, 0.0).sum(axis=0)
    return np.asarray(total / np.where(seen.any(axis=0), seen.sum(axis=0), np.nan)[:, None])


def main() -> None:
    data = Path(sys.argv[1]) if len(sys.argv) > 1 else ROOT.parent / "shared" / "data"
    if not data.is_dir():
        sys.exit(f"{data}: no such folder. Name the folder of real recordings.")
    for study in STUDIES:
        run(study, data)


if __name__ == "__main__":
    main()
