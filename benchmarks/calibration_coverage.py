"""How often the sds of a calibrated person's angles are right, without and with skin that moves along.

Usage: python benchmarks/calibration_coverage.py [PERSONS]

Each made-up person has sizes drawn from the model's prior, markers beside their places by what the model
expects (`placed_within`), and stands as it expects (`standing`), seen by cameras with 0.5 mm of noise.
Sized from that static alone, the person then walks. With skin: thigh markers are displaced by 15 mm,
shank markers by 8 mm, at the extremes of the angles beside them, in directions of their own. Told: how
often 95 % intervals hold the truth over all persons, frames and both sides, and the mean sd over the
RMS error.
"""

from __future__ import annotations

import sys
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from trial_estimates import RATE, STRIDE

from condyle.model import load_skeleton
from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.skeleton import Size, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]
NOISE, STATURE, SECONDS = 0.0005, 1.74, 3.0
SKIN = {"thigh": 0.015, "shank": 0.008}
BESIDE = {"thigh": ("hip_flexion", "knee_flexion"), "shank": ("knee_flexion", "ankle_dorsiflexion")}
HALF_RANGE = {
    "hip_flexion": 22, "hip_adduction": 6, "hip_rotation": 6, "knee_flexion": 30,
    "ankle_dorsiflexion": 13, "subtalar_inversion": 5,
}  # fmt: skip
MIDDLE = {"hip_flexion": 15, "knee_flexion": 33, "ankle_dorsiflexion": 2}
"""Degrees; about a walk."""


def person(model: Skeleton, rng: np.random.Generator) -> Skeleton:
    """Sizes from the prior about the stature, every marker where it truly sits."""
    if model.person is None:
        raise ValueError("the model describes nobody")
    scale = np.log(STATURE / model.person.stature)
    factors = {s.name: [1.0, 1.0, 1.0] for s in model.segments}
    for group in model.sizing.groups:
        factor = float(np.exp(rng.normal(scale, model.sizing.factor_sd)))
        for segment, axis in group.members:
            factors[segment][axis] = factor
    grown = replace(model, sizes={n: Size((f[0], f[1], f[2])) for n, f in factors.items()})
    within = np.array([m.placed_within for m in model.markers])[:, None]
    places = sized_marker_at(grown) + within * rng.standard_normal((len(within), 3))
    markers = tuple(
        replace(m, placed=(float(x), float(y), float(z)))
        for m, (x, y, z) in zip(grown.markers, places, strict=True)
    )
    return replace(grown, markers=markers)


def walk(names: tuple[str, ...], rng: np.random.Generator) -> FloatArray:
    """(frames, scalars) Harmonics of a stride, both sides half a stride apart."""
    time = np.arange(round(SECONDS * RATE)) / RATE
    w = 2 * np.pi / 1.1 * np.arange(1, len(STRIDE) + 1)
    values = np.zeros((len(time), len(names)))
    for k, name in enumerate(names):
        kind = name.removesuffix("_right").removesuffix("_left")
        if kind in HALF_RANGE:
            phase = rng.uniform(0, 2 * np.pi, len(w))
            wave = (STRIDE * np.sin(w * time[:, None] + phase)).sum(axis=1)
            wave *= HALF_RANGE[kind] / np.abs(wave).max()
            values[:, k] = np.radians(MIDDLE.get(kind, 0) + wave)
    values[:, names.index("pelvis_x")] = 1.1 * time
    values[:, names.index("pelvis_y")] = 0.95
    return values


def recording(skeleton: Skeleton, positions: FloatArray, rng: np.random.Generator) -> Recording:
    shape = positions.shape[:2]
    return Recording(
        name="made up",
        source="made-up.c3d",
        rate=RATE,
        first_frame=1,
        labels=skeleton.marker_names,
        positions=positions + rng.normal(0, NOISE, positions.shape),
        residuals=np.full(shape, np.nan),
        cameras=np.zeros(shape, dtype=np.int64),
        up="+Y",
    )


def slid(skeleton: Skeleton, values: FloatArray, names: tuple[str, ...], rng) -> FloatArray:
    """(frames, markers, 3) Displacements in the markers' segments, linear in the angles beside them."""
    moved = np.zeros((len(values), len(skeleton.markers), 3))
    for m, marker in enumerate(skeleton.markers):
        kind, _, side = marker.segment.partition("_")
        for word in BESIDE.get(kind, ()):
            angle = values[:, names.index(f"{word}_{side}")]
            unit = rng.standard_normal(3)
            share = SKIN[kind] / np.sqrt(2) / np.abs(angle).max()
            moved[:, m] += (share * angle)[:, None] * unit / np.linalg.norm(unit)
    return moved


def one(model: Skeleton, seed: int, *, skin: bool) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Column -> errors and sds (frames,) of one person."""
    rng = np.random.default_rng([seed, int(skin)])
    true = person(model, rng)
    functions = SkeletonFunctions(true)
    names = functions.kinematics.freedoms.scalars
    numbers = sized_numbers(true, np.eye(3))
    standing = np.zeros((1, len(names)))
    for k, name in enumerate(names):
        expected = model.sizing.standing.get(name)
        if expected is not None:
            standing[0, k] = rng.normal(expected.value, expected.sd)
    upright = np.array([[[1.0, 0.0, 0.0, 0.0]]])
    still = functions.marker_positions(Posture(standing, upright), numbers)
    static = recording(true, np.repeat(still, 30, axis=0), rng)
    sized = calibrate(model, static, stature=STATURE)
    values = walk(names, rng)
    posture = Posture(values, np.tile(upright, (len(values), 1, 1)))
    positions = functions.marker_positions(posture, numbers)
    if skin:
        segments = [true.segment_index(m.segment) for m in true.markers]
        turns = functions.poses(posture, numbers)[:, segments, :3, :3]
        away = slid(true, values - standing, names, rng)
        positions = positions + np.einsum("nmij,nmj->nmi", turns, away)
    fit = fit_trial(
        sized.skeleton,
        recording(true, positions, rng),
        smooth=True,
        subject=sized.covariance,
    )
    found = {}
    for k, name in enumerate(names):
        kind = name.removesuffix("_right").removesuffix("_left")
        if kind in HALF_RANGE:
            i = fit.column(name)
            found[name] = (fit.values[:, i] - values[:, k], fit.sd[:, i])
    return found


def main() -> None:
    persons = int(sys.argv[1]) if len(sys.argv) > 1 else 30
    model = load_skeleton("lower_limbs")
    print(f"lower_limbs, {persons} persons, sized from the static alone, {SECONDS:g} s of walking")
    print(f"{'angle':22s} {'inside':>9s} {'sd / RMS':>9s}   {'with skin':>9s} {'sd / RMS':>9s}")
    rows: dict[str, list[str]] = {kind: [] for kind in HALF_RANGE}
    whole = []
    for skin in (False, True):
        told = [one(model, seed, skin=skin) for seed in range(persons)]
        shares = []
        for kind in HALF_RANGE:
            pairs = [
                one_person[f"{kind}_{side}"] for one_person in told for side in ("right", "left")
            ]
            error = np.concatenate([e for e, _ in pairs])
            sd = np.concatenate([s for _, s in pairs])
            inside = np.abs(error) <= 1.959964 * sd
            shares.append(inside.mean())
            ratio = sd.mean() / np.sqrt((error**2).mean())
            rows[kind].append(f"{100 * inside.mean():8.1f}% {ratio:9.2f}")
        whole.append(f"{100 * np.mean(shares):8.1f}% {'':9s}")
    for kind, cells in rows.items():
        print(f"{kind:22s} {'   '.join(cells)}")
    print(f"{'all':22s} {'   '.join(whole)}")


if __name__ == "__main__":
    main()
