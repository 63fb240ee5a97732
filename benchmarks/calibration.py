"""How well a person is known from a static alone, and with a trial that goes through the joints' ranges.

Usage: python benchmarks/calibration.py [PERSONS]

Each made-up person has sizes drawn from the model's prior about a known stature; hips that depart from
Harrington's regression by 12.3 +- 5.9 mm (Mantovani 2016) in any direction; knees whose axes depart by
the model's `axis_sd`; landmark markers put on with 5 mm of error per axis, others anywhere. The person
stands as the model expects, then goes through the range of each joint for 10 s, then walks; cameras have
1 mm of noise. With skin, thigh and shank markers are carried by up to 15 and 8 mm (root mean square over
the markers of a segment), in each trial, as the joints beside them turn; a third of the variance is each
marker's own, a third a shift and a third a turn of all markers of the segment together.

Told as medians over persons, beside what was asked.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping
from dataclasses import dataclass, replace
from time import perf_counter

import numpy as np
from calibration_coverage import BESIDE, HALF_RANGE, SKIN, STATURE, recording, walk
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_joint_centres, sized_marker_at, sized_numbers
from condyle.model.skeleton import FreedJoint, Size, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.hip_regressions import regressed_centre
from condyle.solver.posture import Posture
from condyle.solver.results import Calibration
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]
SIDES = ("right", "left")
NOISE, PLACED, RANGE_SECONDS, RATE = 0.001, 0.005, 10.0, 100.0
HIP_AWAY, HIP_AWAY_SD = 0.0123, 0.0059
"""m; Mantovani 2016, Harrington's regression in 67 adults."""
ANYWHERE = 0.03
"""m; markers that may sit further off than this are on no landmark."""
AXIS_SD = np.radians(4.0)
UPRIGHT = np.array([[[1.0, 0.0, 0.0, 0.0]]])


def freed(model: Skeleton) -> Skeleton:
    """The model with hips and knees as calibration may move them, told how well markers were put on."""
    joints = {f"hip_{side}": FreedJoint(None, None, "harrington_2007") for side in SIDES}
    joints |= {f"knee_{side}": FreedJoint(None, AXIS_SD) for side in SIDES}
    markers = tuple(
        replace(m, placed_within=PLACED) if m.placed_within < ANYWHERE else m for m in model.markers
    )
    return replace(model, markers=markers, sizing=replace(model.sizing, joints=joints))


@dataclass(frozen=True)
class Someone:
    """A person whose truth is known, and what the cameras saw."""

    skeleton: Skeleton
    functions: SkeletonFunctions
    static: Recording
    standing: FloatArray
    ranges: Recording
    walking: Recording
    walk: FloatArray


def drawn(model: Skeleton, rng: np.random.Generator) -> Skeleton:
    """Sizes, hips, knee axes and marker places of one person."""
    if model.person is None:
        raise ValueError("the model describes nobody")
    scale = np.log(STATURE / model.person.stature)
    factors = {s.name: [1.0, 1.0, 1.0] for s in model.segments}
    for group in model.sizing.groups:
        factor = float(np.exp(rng.normal(scale, model.sizing.factor_sd)))
        for segment, axis in group.members:
            factors[segment][axis] = factor
    grown = replace(model, sizes={n: Size((f[0], f[1], f[2])) for n, f in factors.items()})
    pelvis = np.array(factors["pelvis"])
    landmarks = grown.segments[grown.segment_index("pelvis")].landmarks
    spines = [pelvis * landmarks[n] for n in ("ASIS_right", "ASIS_left", "PSIS_right", "PSIS_left")]
    joints = []
    for joint in grown.joints:
        name, _, side = joint.name.rpartition("_")
        if name == "hip":
            centre = regressed_centre("harrington_2007", *spines, leg_length=None, side=side)
            away = rng.standard_normal(3)
            away *= abs(rng.normal(HIP_AWAY, HIP_AWAY_SD)) / np.linalg.norm(away)
            joint = replace(joint, placed=tuple(float(x) for x in np.ravel(centre) + away))
        if name == "knee":
            turn = AXIS_SD * rng.standard_normal(3)
            joint = replace(joint, axis_turn=tuple(float(x) for x in turn))
        joints.append(joint)
    within = np.array([m.placed_within for m in model.markers])
    places = sized_marker_at(grown) + within[:, None] * rng.standard_normal((len(within), 3))
    markers = tuple(
        replace(m, placed=(float(x), float(y), float(z)))
        for m, (x, y, z) in zip(grown.markers, places, strict=True)
    )
    return replace(grown, markers=markers, joints=tuple(joints))


def through_the_ranges(names: tuple[str, ...], rng: np.random.Generator) -> FloatArray:
    """(frames, scalars) Each hip swings forward, back, sideways and round; knees and ankles bend."""
    time = np.arange(round(RANGE_SECONDS * RATE)) / RATE
    values = np.zeros((len(time), len(names)))
    for start, side in enumerate(SIDES):
        u = np.clip((time - start * RANGE_SECONDS / 2) / (RANGE_SECONDS / 2), 0, 1)
        turns = 2 * np.pi * u
        values[:, names.index(f"hip_flexion_{side}")] = np.radians(25 - 25 * np.cos(3 * turns))
        values[:, names.index(f"hip_adduction_{side}")] = np.radians(-15 * np.sin(2 * turns))
        values[:, names.index(f"hip_rotation_{side}")] = np.radians(12 * np.sin(4 * turns))
        values[:, names.index(f"knee_flexion_{side}")] = np.radians(45 - 45 * np.cos(2 * turns))
        values[:, names.index(f"ankle_dorsiflexion_{side}")] = np.radians(15 * np.sin(5 * turns))
        values[:, names.index(f"subtalar_inversion_{side}")] = np.radians(10 * np.sin(3 * turns))
    values[:, names.index("pelvis_y")] = 0.95
    return values + np.radians(rng.normal(0, 1, (1, len(names)))) * (np.ptp(values, axis=0) > 0)


def carried(
    model: Skeleton,
    values: FloatArray,
    names: tuple[str, ...],
    directions: Mapping[tuple[int, str], FloatArray],
) -> FloatArray:
    """(frames, markers, 3) Displacements in the markers' segments, up to `SKIN` in this trial."""
    moved = np.zeros((len(values), len(model.markers), 3))
    for m, marker in enumerate(model.markers):
        kind, _, side = marker.segment.partition("_")
        for word in BESIDE.get(kind, ()):
            angle = values[:, names.index(f"{word}_{side}")]
            share = SKIN[kind] / np.sqrt(2) / np.abs(angle).max()
            moved[:, m] += (share * angle)[:, None] * directions[m, word]
    return moved


def carrying(model: Skeleton, rng: np.random.Generator) -> dict[tuple[int, str], FloatArray]:
    """(marker, angle beside it) -> (3,) the direction it is carried, of length 1 on average."""
    found = {}
    for segment in model.segment_names:
        members = [m for m, marker in enumerate(model.markers) if marker.segment == segment]
        for word in BESIDE.get(segment.partition("_")[0], ()):
            places = np.array([model.markers[m].placed for m in members])
            own = _unit(rng.standard_normal((len(members), 3)))
            shift = _unit(rng.standard_normal(3))
            turn = np.cross(_unit(rng.standard_normal(3)), places - places.mean(axis=0))
            turn /= np.sqrt((turn**2).sum(axis=1).mean())
            for m, vector in zip(members, (own + shift + turn) / np.sqrt(3), strict=True):
                found[m, word] = vector
    return found


def _unit(vectors: FloatArray) -> FloatArray:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def someone(model: Skeleton, seed: int, *, skin: bool) -> Someone:
    rng = np.random.default_rng([seed, int(skin), 7])
    true = drawn(model, rng)
    functions = SkeletonFunctions(true)
    names = functions.kinematics.freedoms.scalars
    standing = np.zeros((1, len(names)))
    for k, name in enumerate(names):
        expected = model.sizing.standing.get(name)
        if expected is not None:
            standing[0, k] = rng.normal(expected.value, expected.sd)
    numbers = sized_numbers(true, np.eye(3))
    directions = carrying(true, rng)

    def seen(values: FloatArray, *, slides: bool) -> Recording:
        posture = Posture(values, np.tile(UPRIGHT, (len(values), 1, 1)))
        positions = functions.marker_positions(posture, numbers)
        if slides:
            segments = [true.segment_index(m.segment) for m in true.markers]
            turns = functions.poses(posture, numbers)[:, segments, :3, :3]
            away = carried(true, values - standing, names, directions)
            positions = positions + np.einsum("nmij,nmj->nmi", turns, away)
        made = recording(true, positions, rng)
        return replace(made, positions=positions + rng.normal(0, NOISE, positions.shape))

    values = walk(names, rng)
    return Someone(
        true,
        functions,
        seen(np.repeat(standing, 30, axis=0), slides=False),
        standing,
        seen(through_the_ranges(names, rng), slides=skin),
        seen(values, slides=skin),
        values,
    )


def axis_in_laboratory(
    skeleton: Skeleton, functions: SkeletonFunctions, posture: Posture, side: str
):
    """Unit vector of a knee's flexion, told by turning it a little."""
    numbers = sized_numbers(skeleton, np.eye(3))
    here = functions.kinematics.freedoms.scalars.index(f"knee_flexion_{side}")
    step = np.zeros((1, functions.kinematics.freedoms.size))
    step[0, here] = 1e-4
    segment = skeleton.segment_index(f"shank_{side}")
    before = functions.poses(posture.after(-step), numbers)[0, segment, :3, :3]
    after = functions.poses(posture.after(step), numbers)[0, segment, :3, :3]
    turn = (after - before) @ (after + before).T / 4e-4
    vector = np.array([turn[2, 1], turn[0, 2], turn[1, 0]])
    return vector / np.linalg.norm(vector)


def hip_in_laboratory(
    skeleton: Skeleton, functions: SkeletonFunctions, posture: Posture, side: str
):
    numbers = sized_numbers(skeleton, np.eye(3))
    pose = functions.poses(posture, numbers)[0, skeleton.segment_index("pelvis")]
    centre = sized_joint_centres(skeleton)["pelvis"][f"thigh_{side}"]
    return pose[:3, :3] @ centre + pose[:3, 3]


def length_of(skeleton: Skeleton, segment: str, child: str) -> float:
    return float(np.linalg.norm(sized_joint_centres(skeleton)[segment][child]))


def judged(person: Someone, found: Calibration) -> dict[str, FloatArray]:
    """Errors of one calibration."""
    functions = SkeletonFunctions(found.skeleton)
    true_posture = Posture(person.standing, UPRIGHT)
    own = found.own_posture
    hips, axes, thighs, shanks = [], [], [], []
    for side in SIDES:
        away = hip_in_laboratory(found.skeleton, functions, own, side) - hip_in_laboratory(
            person.skeleton, person.functions, true_posture, side
        )
        hips.append(1000 * np.linalg.norm(away))
        cosine = axis_in_laboratory(found.skeleton, functions, own, side) @ axis_in_laboratory(
            person.skeleton, person.functions, true_posture, side
        )
        axes.append(np.degrees(np.arccos(np.clip(cosine, -1, 1))))
        for kind, child, into in (("thigh", "shank", thighs), ("shank", "talus", shanks)):
            names = f"{kind}_{side}", f"{child}_{side}"
            into.append(
                1000 * abs(length_of(found.skeleton, *names) - length_of(person.skeleton, *names))
            )
    inside = []
    for group in person.skeleton.sizing.groups:
        segment, axis = group.members[0]
        size = found.skeleton.sizes[segment]
        true = person.skeleton.sizes[segment].factors[axis]
        assert size.sd is not None
        inside.append(abs(size.factors[axis] - true) <= 1.959964 * size.sd[axis])
    joint_inside = []
    for joint, true_joint in zip(found.skeleton.joints, person.skeleton.joints, strict=True):
        for value, sd, truth in (
            (joint.placed, joint.placed_sd, true_joint.placed),
            (joint.axis_turn, joint.axis_turn_sd, true_joint.axis_turn),
        ):
            if value is not None and sd is not None and truth is not None:
                joint_inside += list(np.abs(np.subtract(value, truth)) <= 1.959964 * np.array(sd))
    return {
        "hip centre, mm": np.array(hips),
        "knee axis, deg": np.array(axes),
        "thigh length, mm": np.array(thighs),
        "shank length, mm": np.array(shanks),
        "sizes inside 95 %": 100.0 * np.array(inside),
        "joints inside 95 %": 100.0 * np.array(joint_inside),
    }


def offsets(person: Someone, found: Calibration) -> dict[str, FloatArray]:
    """Mean error of each angle over the walk, deg, and how often its 95 % interval holds the truth."""
    fit = fit_trial(found.skeleton, person.walking, subject=found.covariance)
    names = person.functions.kinematics.freedoms.scalars
    told: dict[str, list[float]] = {}
    for kind in HALF_RANGE:
        for side in SIDES:
            k, i = names.index(f"{kind}_{side}"), fit.column(f"{kind}_{side}")
            error = fit.values[:, i] - person.walk[:, k]
            told.setdefault(f"offset of {kind}, deg", []).append(abs(np.degrees(error.mean())))
            inside = (np.abs(error) <= 1.959964 * fit.sd[:, i]).mean()
            told.setdefault("angles inside 95 %", []).append(100 * inside)
    return {name: np.array(values) for name, values in told.items()}


ASKED = {
    (False, "static", "thigh length, mm"): "8",
    (False, "static", "shank length, mm"): "8",
    (False, "ranges", "hip centre, mm"): "4",
    (False, "ranges", "knee axis, deg"): "2",
    (False, "ranges", "sizes inside 95 %"): "90-98",
    (True, "ranges", "sizes inside 95 %"): ">= 85",
    (True, "ranges", "joints inside 95 %"): ">= 85",
}


def main() -> None:
    persons = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    model = freed(load_skeleton("lower_limbs"))
    for skin in (False, True):
        tables: dict[str, dict[str, list[FloatArray]]] = {"static": {}, "ranges": {}}
        seconds = []
        for seed in range(persons):
            person = someone(model, seed, skin=skin)
            for kind, moving in (("static", ()), ("ranges", (person.ranges,))):
                began = perf_counter()
                found = calibrate(model, person.static, moving=moving, stature=STATURE)
                if moving:
                    seconds.append(perf_counter() - began)
                for name, values in {**judged(person, found), **offsets(person, found)}.items():
                    tables[kind].setdefault(name, []).append(values)
        print(
            f"{'with' if skin else 'without'} skin that moves along, {persons} persons; "
            f"a calibration with movement takes {np.median(seconds):.1f} s"
        )
        print(f"{'':36s} {'static alone':>14s} {'with ranges':>14s}   asked")
        for name in tables["static"]:
            cells = []
            for kind in ("static", "ranges"):
                values = np.concatenate(tables[kind][name])
                middle = values.mean() if "inside" in name else np.median(values)
                cells.append(f"{middle:14.2f}")
            asked = [
                f"{kind} {ASKED[skin, kind, name]}"
                for kind in ("static", "ranges")
                if (skin, kind, name) in ASKED
            ]
            print(f"{name:36s} {' '.join(cells)}   {', '.join(asked)}")


if __name__ == "__main__":
    main()
