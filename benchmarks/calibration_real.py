"""What movement adds to a calibration, on real recordings that nobody here made.

Usage: python benchmarks/calibration_real.py [DATA_FOLDER]

The three recordings of `real_recordings.py`. Each person is sized from the static alone, and from the static
and the first 10 s of the trial (the first half of a shorter one); RMS error is told on the frames that neither has
seen, angles beside those of a separate program on the whole trial. A low RMS alone proves nothing: markers may be
placed anew wherever they fit. Last, sizes from the first half of the movement beside those from the second.
"""

from __future__ import annotations

import sys
from pathlib import Path
from time import perf_counter

import numpy as np
import pandas as pd
from real_recordings import ANGLES, ROOT, SIDES, STUDIES, Study, same_angle, verdict

from condyle.model import load_skeleton
from condyle.model.growth import sized_joint_centres, sized_lengths
from condyle.recording import read_label_map, read_recording
from condyle.solver.calibration import calibrate
from condyle.solver.results import Calibration
from condyle.solver.trial_fit import clipped, fit_trial

SECONDS = 10.0
ASKED = {"treadmill-walk": 5.0, "plate-run": 6.0, "box-lift": 10.0}
"""mm, RMS error with movement."""
REPEATED = 5.0
"""mm, between lengths from two halves."""


def run(study: Study, data: Path) -> None:
    folder = data / study.folder
    skeleton = load_skeleton(study.model)
    labels = read_label_map(Path(study.labels)) if study.labels else None
    static, trial = read_recording(folder / study.static), read_recording(folder / study.trial)
    reference = pd.read_csv(data / "segment-angles" / f"{study.folder}.csv")
    whole = len(trial) / trial.rate
    middle = min(SECONDS, whole / 2)
    first, second = clipped(trial, start=None, end=middle), clipped(trial, start=middle, end=None)
    found: dict[str, Calibration] = {}
    print(f"{study.folder}")
    for name, moving in (("static alone", ()), ("with movement", (first,))):
        began = perf_counter()
        found[name] = calibrate(skeleton, static, moving=moving, labels=labels)
        seconds = perf_counter() - began
        rms = 1000 * fit_trial(found[name].skeleton, second).rms()
        told = verdict(rms, ASKED[study.folder]) if moving else f"{rms:8.2f}"
        print(f"  {name:15s} RMS on unseen frames {told} mm   ({seconds:.1f} s)")
    used = found["with movement"].movement
    if used is not None:
        print(f"  {used.frames} of {used.of_all} frames chosen")
    fits = {name: fit_trial(calibration.skeleton, trial) for name, calibration in found.items()}
    print("  angle beside the separate program's, RMS, deg   static alone  with movement")
    for angle, (parent, child, sign, _) in ANGLES.items():
        for side in SIDES:
            upper = parent if parent == "pelvis" else f"{parent}_{side}"
            expected = reference[f"{angle}_{side}"].to_numpy()
            away = [
                np.std(same_angle(fit, upper, f"{child}_{side}", sign) - expected)
                for fit in fits.values()
            ]
            print(f"    {f'{angle}_{side}':44s} {away[0]:12.2f} {away[1]:14.2f}")
    # Both halves of the same movement, so that they can be asked to agree.
    half = clipped(trial, start=None, end=min(2 * SECONDS, whole))
    cut = len(half) / half.rate / 2
    halves = [
        calibrate(skeleton, static, moving=(part,), labels=labels).skeleton
        for part in (clipped(half, start=None, end=cut), clipped(half, start=cut, end=None))
    ]
    lengths = [sized_lengths(sized) for sized in halves]
    print("  length, mm           first half  second half")
    for segment in ("pelvis", "thigh_right", "shank_right", "foot_right"):
        one, other = (1000 * length[segment] for length in lengths)
        print(
            f"    {segment:17s} {one:11.1f} {other:12.1f}   off by {verdict(abs(one - other), REPEATED)}"
        )
    for side in SIDES:
        hips = [sized_joint_centres(sized)["pelvis"][f"thigh_{side}"] for sized in halves]
        off = 1000 * float(np.linalg.norm(np.subtract(*hips)))
        print(f"    hip centre, {side:29s}   off by {verdict(off, REPEATED)}")


def main() -> None:
    data = Path(sys.argv[1]) if len(sys.argv) > 1 else ROOT.parent / "shared" / "data"
    if not data.is_dir():
        sys.exit(f"{data}: no such folder. Name the folder of real recordings.")
    for study in STUDIES:
        run(study, data)


if __name__ == "__main__":
    main()
