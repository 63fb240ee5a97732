"""What calibration does not know, carried to the angles: against refits, and kept beside the subject."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.errors import CondyleError
from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.skeleton import Size, Skeleton
from condyle.solver.calibration import calibrate
from condyle.solver.calibration_influence import calibration_doubt, influences
from condyle.solver.covariances import all_pairs
from condyle.solver.frame_fit import fit_frames, whole_covariances
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.subject_covariance import (
    SubjectCovariance,
    entry_names,
    entry_values,
    independent,
    read_covariance,
    write_covariance,
)

FloatArray = NDArray[np.float64]


@pytest.fixture(scope="module")
def sized() -> Skeleton:
    """The lower limbs, every factor 1 and every marker placed where it is expected."""
    model = load_skeleton("lower_limbs")
    places = sized_marker_at(model)
    markers = tuple(
        replace(m, placed=tuple(float(v) for v in at), placed_sd=(0.004, 0.005, 0.006))
        for m, at in zip(model.markers, places, strict=True)
    )
    sizes = {s.name: Size((1.0, 1.0, 1.0), (0.02, 0.01, 0.02)) for s in model.segments}
    return replace(model, markers=markers, sizes=sizes)


def problem_for(skeleton: Skeleton, positions: FloatArray) -> FrameProblem:
    functions = SkeletonFunctions(skeleton)
    sd = np.array([m.sd for m in skeleton.markers])
    weights = np.tile(sd**-2, (len(positions), 1))
    return FrameProblem(functions, positions, weights, sized_numbers(skeleton, np.eye(3)))


def postures(functions: SkeletonFunctions, frames: int) -> Posture:
    rng = np.random.default_rng(3)
    names = functions.kinematics.freedoms.scalars
    scalars = np.zeros((frames, len(names)))
    for k, name in enumerate(names):
        c = functions.skeleton.coordinate(name)
        if c.has_range and not name.startswith("toes_"):
            scalars[:, k] = c.lower + (c.upper - c.lower) * rng.uniform(0.3, 0.6, frames)
    return Posture(scalars, np.tile([1.0, 0, 0, 0], (frames, 1, 1)))


def changed(skeleton: Skeleton, entry: str, by: float) -> Skeleton:
    """The skeleton with one entry changed: ln of a group's factor, or a marker's place (m)."""
    kind, name, axis = entry.split()
    k = "xyz".index(axis)
    if kind == "placed":
        markers = []
        for m in skeleton.markers:
            place = list(m.placed or (0, 0, 0))
            place[k] += by if m.name == name else 0.0
            markers.append(replace(m, placed=tuple(place)))
        return replace(skeleton, markers=tuple(markers))
    (group,) = (g for g in skeleton.sizing.groups if g.members[0] == (name, k))
    sizes = dict(skeleton.sizes)
    for segment, which in group.members:
        factors = list(sizes[segment].factors)
        factors[which] *= np.exp(by)
        sizes[segment] = Size(tuple(factors))
    return replace(skeleton, sizes=sizes)


@pytest.mark.parametrize(
    "entry",
    ["placed FE_lateral_right z", "placed ASIS_left y", "size thigh_right y", "size pelvis x"],
)
def test_an_influence_is_what_a_refit_shows(sized: Skeleton, entry: str) -> None:
    functions = SkeletonFunctions(sized)
    truth = postures(functions, 3)
    positions = functions.marker_positions(truth, sized_numbers(sized, np.eye(3)))
    problem = problem_for(sized, positions)
    fits = fit_frames(problem)
    column = entry_names(sized).index(entry)
    own = whole_covariances(problem, fits.solution, np.arange(len(problem)))
    told = influences(problem, fits.posture, own)[:, :, column]
    h = 1e-4
    moved = []
    for sign in (1, -1):
        other = problem_for(changed(sized, entry, sign * h), positions)
        moved.append(fit_frames(other).posture)
    found = (moved[0].scalars - moved[1].scalars) / (2 * h)
    known = ~fits.involved[:, : found.shape[1]]
    scale = np.abs(told).max()
    np.testing.assert_allclose(
        found[known], told[:, : found.shape[1]][known], rtol=0.01, atol=0.002 * scale
    )


def test_one_unsure_entry_gives_the_variance_of_its_influence(sized: Skeleton) -> None:
    functions = SkeletonFunctions(sized)
    truth = postures(functions, 5)
    positions = functions.marker_positions(truth, sized_numbers(sized, np.eye(3)))
    problem = problem_for(sized, positions)
    fits = fit_frames(problem)
    names = entry_names(sized)
    column = names.index("size thigh_right y")
    matrix = np.zeros((len(names), len(names)))
    matrix[column, column] = 0.03**2
    doubt = calibration_doubt(
        problem,
        fits.posture,
        lambda rows: whole_covariances(problem, fits.solution, rows),
        SubjectCovariance(names, entry_values(sized), matrix, "made up"),
        all_pairs(functions.kinematics.freedoms.size),
    )
    own = whole_covariances(problem, fits.solution, np.arange(len(problem)))
    told = influences(problem, fits.posture, own)[:, :, column]
    np.testing.assert_allclose(
        doubt.covariance, 0.03**2 * told[:, :, None] * told[:, None, :], atol=1e-12
    )
    assert (np.einsum("nii->n", doubt.varying) < np.einsum("nii->n", doubt.covariance)).all()


def test_a_file_is_read_back_and_edited_numbers_stand_for_themselves(
    sized: Skeleton, tmp_path: Path
) -> None:
    rng = np.random.default_rng(1)
    names = entry_names(sized)
    root = rng.normal(0, 0.003, (len(names), len(names)))
    whole = SubjectCovariance(
        names, entry_values(sized), root @ root.T, "the calibration's covariance"
    )
    file = tmp_path / "s-covariance.npz"
    write_covariance(file, whole)
    same, edited = read_covariance(file, sized)
    assert edited == ()
    np.testing.assert_allclose(same.matrix, whole.matrix, rtol=1e-6)
    entry = "placed CA_left y"
    other, edited = read_covariance(file, changed(sized, entry, 0.004))
    assert edited == (entry,)
    i = names.index(entry)
    assert other.matrix[i, i] == pytest.approx(0.005**2)
    assert np.count_nonzero(other.matrix[i]) == 1
    keep = np.arange(len(names)) != i
    np.testing.assert_allclose(
        other.matrix[np.ix_(keep, keep)], whole.matrix[np.ix_(keep, keep)], rtol=1e-6
    )
    assert "1 numbers edited" in other.how


def test_without_a_file_the_sds_stand_alone(sized: Skeleton) -> None:
    alone = independent(sized)
    names = entry_names(sized)
    assert alone.matrix[names.index("placed ASIS_left z"), names.index("placed ASIS_left z")] == (
        pytest.approx(0.006**2)
    )
    assert np.count_nonzero(alone.matrix - np.diag(np.diag(alone.matrix))) == 0


@pytest.mark.parametrize(
    "content", [b"", b"no archive at all", b"PK\x03\x04 cut short"], ids=["empty", "text", "cut"]
)
def test_a_damaged_file_is_told_and_not_a_traceback(
    sized: Skeleton, tmp_path: Path, content: bytes
) -> None:
    file = tmp_path / "s-covariance.npz"
    file.write_bytes(content)
    with pytest.raises(CondyleError, match="cannot be read"):
        read_covariance(file, sized)


def test_a_file_of_another_model_and_one_with_objects_are_refused(
    sized: Skeleton, tmp_path: Path
) -> None:
    file = tmp_path / "s-covariance.npz"
    one = np.array(["size nose x"])
    np.savez(file, names=one, values=np.ones(1), matrix=np.ones((1, 1)))
    with pytest.raises(CondyleError, match="another model"):
        read_covariance(file, sized)
    np.savez(file, names=np.array([{}]), values=np.ones(1), matrix=np.ones((1, 1)))
    with pytest.raises(CondyleError, match="cannot be read"):
        read_covariance(file, sized)


def test_calibrations_joint_covariance_has_its_sds_on_the_diagonal(recording_of) -> None:
    model = load_skeleton("lower_limbs")
    functions = SkeletonFunctions(model)
    truth = postures(functions, 1)
    truth.scalars[:] = 0.0
    positions = functions.marker_positions(truth, sized_numbers(model, np.eye(3)))
    static = recording_of(model.marker_names, np.repeat(positions, 20, axis=0), up="+Y")
    found = calibrate(model, static, stature=1.741)
    names, sd = entry_names(model), np.sqrt(np.diag(found.covariance.matrix))
    for marker in found.markers:
        for axis, told in zip("xyz", marker.placed_sd, strict=True):
            assert sd[names.index(f"placed {marker.name} {axis}")] == pytest.approx(told, rel=1e-6)
    size = found.skeleton.sizes["thigh_right"]
    assert size.sd is not None
    assert sd[names.index("size thigh_right y")] == pytest.approx(
        size.sd[1] / size.factors[1], rel=1e-6
    )
    # A shank whose attitude is unsure takes all its markers along: strongly correlated places.
    i, j = names.index("placed LM_right x"), names.index("placed MM_right x")
    assert found.covariance.matrix[i, j] / (sd[i] * sd[j]) > 0.5
