"""Ellipsoids of fitted places, against what refitting noisy markers again and again gives."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.model.errors import CondyleError
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.place_uncertainty import place_covariances, pose_skeleton
from condyle.solver.results import TrialFit
from condyle.solver.trial_fit import fit_trial

DRAWS = 400
SHRINK = 10.0
"""Noise is drawn with a tenth of the model's sds, so that places answer in proportion; pulls to rest and
limits then weigh as little as they do in the covariance."""


@pytest.fixture(scope="module")
def legs() -> Skeleton:
    return load_skeleton("lower_limbs")


def recording(skeleton: Skeleton, positions: np.ndarray) -> Recording:
    shape = positions.shape[:2]
    return Recording(
        name="draws",
        source="draws",
        rate=100.0,
        first_frame=1,
        labels=skeleton.marker_names,
        positions=positions,
        residuals=np.full(shape, np.nan),
        cameras=np.zeros(shape, dtype=np.int64),
    )


@pytest.fixture(scope="module")
def standing(legs: Skeleton) -> TrialFit:
    """One frame fitted to the model's own markers, slightly bent so that no limit is near."""
    from condyle.model.growth import sized_numbers
    from condyle.solver.frame_problem import SkeletonFunctions
    from condyle.solver.posture import upright_posture

    functions = SkeletonFunctions(legs)
    free = [c for c in legs.coordinates if c.follows is None]
    values = np.array([0.5 if "knee" in c.name else 0.12 if c.unit == "rad" else 0.3 for c in free])
    posture = upright_posture(values, len(functions.kinematics.freedoms.balls), 1)
    positions = functions.marker_positions(posture, sized_numbers(legs, np.eye(3)))
    return fit_trial(legs, recording(legs, positions), up="+Y")


def values_of(fit: TrialFit, numbers: np.ndarray) -> dict[str, float]:
    return {c.name: float(numbers[0, i]) for i, c in enumerate(fit.columns)}


def test_the_spread_of_refitted_markers_is_the_ellipsoids(
    legs: Skeleton, standing: TrialFit
) -> None:
    motion = standing.motion
    posed = pose_skeleton(legs, motion, 0, values_of(standing, standing.values))
    known = place_covariances(posed, motion, 0, values_of(standing, standing.sd))
    rng = np.random.default_rng(3)
    sd = np.array([marker.sd for marker in legs.markers])[:, None] / SHRINK
    noisy = motion.fitted + sd * rng.normal(size=(DRAWS, *motion.fitted.shape[1:]))
    spread = fit_trial(legs, recording(legs, noisy), up="+Y").motion.fitted
    for index, name in enumerate(known.names[: len(legs.marker_names)]):
        column = motion.marker_names.index(name)
        found = SHRINK**2 * np.cov(spread[:, column].T)
        # Relative error of a sample variance: sqrt(2 / (n - 1)) = 7 %; four of these.
        np.testing.assert_allclose(
            np.trace(found), np.trace(known.covariances[index]), rtol=0.28, err_msg=name
        )


def test_an_ellipsoid_is_no_wider_than_the_markers_own_noise(
    legs: Skeleton, standing: TrialFit
) -> None:
    motion = standing.motion
    posed = pose_skeleton(legs, motion, 0, values_of(standing, standing.values))
    known = place_covariances(posed, motion, 0, values_of(standing, standing.sd))
    sd = {marker.name: marker.sd for marker in legs.markers}
    for name, covariance in zip(known.names, known.covariances, strict=True):
        values = np.linalg.eigvalsh(covariance)
        assert values.min() > -1e-12
        if name in sd:  # a fit can only lessen what its own marker leaves open
            assert np.sqrt(values.max()) <= sd[name] * (1 + 1e-9), name


def test_places_are_those_of_the_results(legs: Skeleton, standing: TrialFit) -> None:
    motion = standing.motion
    posed = pose_skeleton(legs, motion, 0, values_of(standing, standing.values))
    known = place_covariances(posed, motion, 0, values_of(standing, standing.sd))
    for name, place in zip(known.names, known.places, strict=True):
        if "/" not in name:
            expected = motion.fitted[0, motion.marker_names.index(name)]
            np.testing.assert_allclose(place, expected, atol=1e-6)
    assert "pelvis/thigh_right" in known.names
    assert "toes_extension_right" in known.pinned


def test_another_skeleton_is_refused(standing: TrialFit) -> None:
    other = load_skeleton("full_body")
    with pytest.raises(CondyleError, match="was not solved with full body"):
        pose_skeleton(other, standing.motion, 0, values_of(standing, standing.values))
