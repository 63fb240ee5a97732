"""Masses grow with the person, second moments with the segments."""

from __future__ import annotations

from dataclasses import replace
from math import nan

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.model.inertia import centre_of_mass, mass_ratio, sized_inertias, total_mass
from condyle.model.skeleton import Fixed, Joint, Person, Segment, Size, Sizing, Skeleton

PERSON = Person(1.8, 80.0)


def body(segment: Segment, **changes: object) -> Skeleton:
    joint = Joint("root", "laboratory", segment.name, Fixed())
    plain = Skeleton("body", (segment,), (joint,), (), (), Sizing(0.1, ()))
    return replace(plain, **changes)  # type: ignore[arg-type]


def test_a_grown_cloud_of_points_has_the_grown_inertia() -> None:
    """Points with uncorrelated axes, stretched axis by axis: the definition of the tensor."""
    rng = np.random.default_rng(4)
    octant = rng.uniform(0.05, 0.3, (6, 3))
    signs = np.array([[a, b, c] for a in (1, -1) for b in (1, -1) for c in (1, -1)])
    spread = (octant[:, None] * signs).reshape(-1, 3)
    centre = np.array([0.01, -0.2, 0.03])
    factors, ratio = np.array([1.2, 0.9, 1.1]), 1.25

    def moments(points: np.ndarray, mass: float) -> np.ndarray:
        x, y, z = (points**2).mean(axis=0)
        return mass * np.array([y + z, x + z, x + y])

    radii = np.sqrt(moments(spread, 1.0))
    segment = Segment(
        "box", mass=3.0, centre_of_mass=tuple(centre.tolist()), gyration=tuple(radii.tolist())
    )
    skeleton = body(
        segment,
        person=PERSON,
        subject=Person(1.9, ratio * 80.0),
        sizes={"box": Size(tuple(factors.tolist()))},
    )
    found = sized_inertias(skeleton)["box"]
    assert found.mass == pytest.approx(ratio * 3.0, rel=1e-15)
    np.testing.assert_allclose(found.centre, factors * centre, rtol=1e-14)
    np.testing.assert_allclose(found.moments, moments(factors * spread, ratio * 3.0), rtol=1e-12)


@pytest.mark.parametrize("subject", [None, Person(1.9, nan)])
def test_an_unknown_mass_leaves_the_models_own(subject: Person | None) -> None:
    segment = Segment("box", mass=3.0, centre_of_mass=(0.0, 0.0, 0.0))
    skeleton = body(segment, person=PERSON, subject=subject)
    assert mass_ratio(skeleton) == 1.0
    assert sized_inertias(skeleton)["box"].moments == (0.0, 0.0, 0.0)
    assert total_mass(sized_inertias(skeleton)) == 3.0


def test_nothing_is_guessed_for_a_segment_without_mass_or_centre() -> None:
    for segment in (Segment("box", mass=3.0), Segment("box", centre_of_mass=(0.0, 0.0, 0.0))):
        assert sized_inertias(body(segment)) == {}
    assert np.isnan(centre_of_mass({}, ("box",), np.eye(4)[None, None])).all()


def test_the_feet_of_the_shipped_legs_are_the_published_foot_again() -> None:
    # de Leva 1996, table 4 (men), as the model cites it: 1.37 % of body mass, centre at 44.15 % of
    # 0.2581 m from the heel, whose back lies 0.057 m behind the ankle (a share of foot length).
    skeleton = load_skeleton("lower_limbs")
    inertias = sized_inertias(skeleton)
    foot = {name: inertias[f"{name}_right"] for name in ("talus", "foot", "toes")}
    places = {"talus": np.zeros(3)}
    for child, parent in (("foot", "talus"), ("toes", "foot")):
        joint = next(j for j in skeleton.joints if j.child == f"{child}_right")
        places[child] = places[parent] + np.array(joint.at)
    poses = np.tile(np.eye(4), (1, 3, 1, 1))
    poses[0, :, :3, 3] = [places[name] for name in foot]
    centre = centre_of_mass(foot, tuple(foot), poses)[0]
    assert total_mass(foot) == pytest.approx(0.0137 * 73.0, rel=1e-12)
    assert centre[0] == pytest.approx(0.4415 * 0.2581 - 0.057, abs=5e-4)
