"""Published tables of body segments: their own identities, and what they make of the shipped models."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import get_args

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from condyle.model import load_skeleton, load_tree, write_subject
from condyle.model.anatomy import Anatomy
from condyle.model.body_table_numbers import DE_LEVA, DUMAS, TRUNK_LENGTHS, AxesPart, BodyTable
from condyle.model.body_tables import (
    RigidPart,
    kept_by_body_table,
    radii_of,
    spread_of,
    together,
    tree_with_masses,
    with_body_table,
)
from condyle.model.errors import CondyleError
from condyle.model.growth import grown_segment, sized_numbers
from condyle.model.inertia import centre_of_mass, sized_inertias
from condyle.model.skeleton import Person, Segment, Size, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture

TABLES: tuple[BodyTable, ...] = get_args(BodyTable)
FULL = load_skeleton("full_body")
PAIRED = ("upper arm", "forearm", "hand", "thigh", "shank", "foot")
FOOT = ("foot_right", "talus_right", "toes_right")

# de Leva 1996, table 4, other ends of the same parts (women, men): centre along, and the radii sagittal,
# transverse, longitudinal. Ends: shank to the lateral malleolus and to the sphyrion, forearm
# to the styloid, hand to the tip of the third finger.
OTHER_ENDS = {
    ("shank", "LMAL"): ((0.4416, 0.271, 0.267, 0.093), (0.4459, 0.255, 0.249, 0.103)),
    ("shank", "SPHY"): ((0.4481, 0.275, 0.271, 0.094), (0.4524, 0.258, 0.253, 0.105)),
    ("forearm", "STYL"): ((0.4592, 0.263, 0.259, 0.095), (0.4608, 0.278, 0.267, 0.122)),
    ("hand", "DAC3"): ((0.3427, 0.244, 0.208, 0.154), (0.3624, 0.288, 0.235, 0.184)),
}


def segment(skeleton: Skeleton, name: str) -> Segment:
    return skeleton.segments[skeleton.segment_index(name)]


def rigid(skeleton: Skeleton, name: str, within: str) -> RigidPart:
    found = segment(skeleton, name)
    origin = Anatomy(skeleton).origin(name, within)
    assert found.mass_share is not None
    assert found.centre_of_mass is not None
    assert found.gyration is not None
    assert origin is not None
    return RigidPart(found.mass_share, origin + found.centre_of_mass, spread_of(found.gyration))


# The sums of the printed table: 100.00 % for men, 99.99 % for women.
@pytest.mark.parametrize(("name", "percent"), [("de_leva_male", 100.00), ("de_leva_female", 99.99)])
def test_de_levas_masses_add_up_as_printed(name: BodyTable, percent: float) -> None:
    shares = {part: entry.share for part, entry in DE_LEVA[name].items()}
    assert 100 * sum(s * (1 + (p in PAIRED)) for p, s in shares.items()) == pytest.approx(percent)
    trunk = sum(shares[f"{part} trunk"] for part in ("upper", "middle", "lower"))
    assert trunk == pytest.approx({"de_leva_male": 0.4346, "de_leva_female": 0.4257}[name])


@pytest.mark.parametrize("ends", OTHER_ENDS)
@pytest.mark.parametrize("sex", [0, 1])
def test_de_levas_centres_and_radii_do_not_depend_on_the_ends(
    ends: tuple[str, str], sex: int
) -> None:
    entry = DE_LEVA[("de_leva_female", "de_leva_male")[sex]][ends[0]]
    along, *radii = OTHER_ENDS[ends][sex]
    ratio = along / entry.along  # of the lengths, and so of the radii
    x, y, z = entry.radii
    # Printed to three digits: half a unit in each of two radii.
    for ours, theirs in zip((x, z, y), radii, strict=True):
        assert theirs / ours == pytest.approx(ratio, abs=0.0006 / ours * (1 + ratio))


def test_de_levas_parts_of_the_trunk_are_as_long_as_the_trunk() -> None:
    # Mean SUPR-MIDH 529.3 mm (women) and 531.9 mm (men), from memory, as the parts are.
    for name, whole in (("de_leva_female", 0.5293), ("de_leva_male", 0.5319)):
        lengths = TRUNK_LENGTHS[name]  # type: ignore[index]
        assert lengths.upper + lengths.middle + lengths.lower == pytest.approx(whole, abs=1e-4)


@pytest.mark.parametrize("name", TABLES)
def test_every_part_is_a_body_that_can_be(name: BodyTable) -> None:
    table = DE_LEVA[name] if name in DE_LEVA else DUMAS[name]
    for part, entry in table.items():
        assert (spread_of(entry.radii) > 0).all(), part
        if isinstance(entry, AxesPart):
            for side in (1.0, -1.0):
                assert (np.linalg.eigvalsh(tensor(entry, side)) > 0).all(), part


def tensor(entry: AxesPart, side: float) -> np.ndarray:
    """Over mass and length squared; side is -1 for the left."""
    xx, yy, zz = np.square(entry.radii)
    xy, xz, yz = np.sign(entry.products) * np.square(entry.products) * [1, side, side]
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])


# Sums of the printed table; rounding, not an error.
@pytest.mark.parametrize(("name", "percent"), [("dumas_female", 99.9), ("dumas_male", 100.2)])
def test_dumas_masses_add_up_as_printed(name: BodyTable, percent: float) -> None:
    total = sum(entry.share * (1 + (part in PAIRED)) for part, entry in DUMAS[name].items())
    assert 100 * total == pytest.approx(percent)


# Dempster 1955 by way of Winter: compound limbs follow from their parts by parallel axes, ends meeting
# at the joints. Lengths of the parts over stature: Drillis & Contini 1966.
@pytest.mark.parametrize(
    ("parts", "length", "centre", "radius", "within"),
    [
        # (share, centre from the top over stature, radius over stature)
        (
            [(0.100, 0.433 * 0.245, 0.323 * 0.245), (0.061, 0.245 + 0.606 * 0.246, 0.416 * 0.246)],
            0.491, 0.447, 0.326, 0.015,
        ),
        (
            [(0.028, 0.436 * 0.186, 0.322 * 0.186), (0.022, 0.186 + 0.682 * 0.146, 0.468 * 0.146)],
            0.332, 0.530, 0.368, 0.02,
        ),
    ],
    ids=["leg", "arm"],
)  # fmt: skip
def test_dempsters_whole_limbs_are_their_parts_together(
    parts: list[tuple[float, float, float]],
    length: float,
    centre: float,
    radius: float,
    within: float,
) -> None:
    bodies = [RigidPart(m, np.array([0, -y, 0]), spread_of((r, 0.0, r))) for m, y, r in parts]
    whole = together(bodies)
    assert whole.share == pytest.approx({0.491: 0.161, 0.332: 0.050}[length])
    assert -whole.centre[1] / length == pytest.approx(centre, abs=within)
    assert radii_of(whole.spread)[0] / length == pytest.approx(radius, abs=within)


# The same table, radii about the proximal end: rho_prox^2 = rho^2 + centre^2, to its rounding.
@pytest.mark.parametrize(
    ("centre", "radius", "about_the_end"),
    [
        (0.433, 0.323, 0.540), (0.433, 0.302, 0.528), (0.500, 0.475, 0.690), (0.430, 0.303, 0.526),
        (0.436, 0.322, 0.542), (0.506, 0.297, 0.587), (0.626, 0.496, 0.798),
    ],
)  # fmt: skip
def test_dempsters_radii_about_an_end_are_parallel_axes(
    centre: float, radius: float, about_the_end: float
) -> None:
    # Beside its mirror image in the joint, a body turns about that joint as it does alone.
    halves = [
        RigidPart(0.5, np.array([0, y, 0]), spread_of((radius, 0.0, radius)))
        for y in (-centre, centre)
    ]
    assert radii_of(together(halves).spread)[2] == pytest.approx(about_the_end, abs=1e-3)


@given(st.lists(st.floats(0.01, 1), min_size=3, max_size=3))
def test_radii_and_mean_squares_are_two_ways_to_say_one_thing(squares: list[float]) -> None:
    np.testing.assert_allclose(spread_of(radii_of(np.array(squares))), squares, rtol=1e-12)


def test_the_worked_thigh_of_a_man_of_73_kg() -> None:
    # de Leva 1996, men: 14.16 % of 73.0 kg; 40.95 % and .329 of 0.4222 m.
    thigh = sized_inertias(with_body_table(FULL, "de_leva_male"))["thigh_right"]
    assert thigh.mass == pytest.approx(10.337, abs=5e-4)
    assert thigh.centre[1] == pytest.approx(-0.1729, abs=5e-5)
    assert thigh.moments[2] == pytest.approx(0.1994, abs=5e-5)


@pytest.mark.parametrize(
    "model", ["full_body", "lower_limbs", "trunk", "upper_limb", "hand", "sagittal_leg"]
)
def test_de_levas_men_are_what_the_shipped_models_already_say(model: str) -> None:
    skeleton = load_skeleton(model)
    same = with_body_table(skeleton, "de_leva_male")
    assert kept_by_body_table(skeleton, "de_leva_male") == ()
    for before, after in zip(skeleton.segments, same.segments, strict=True):
        assert (before.mass is None) == (after.mass is None)
        if before.mass is not None:
            assert after.mass == pytest.approx(before.mass, rel=1e-9)
            # Written to 0.1 mm; the abdomen's centre was placed for a standing trunk.
            within = 2e-3 if before.name == "abdomen" else 1.5e-4
            np.testing.assert_allclose(after.centre_of_mass, before.centre_of_mass, atol=within)
            np.testing.assert_allclose(after.gyration, before.gyration, atol=1.5e-4)


@pytest.mark.parametrize("name", TABLES)
def test_talus_foot_and_toes_together_are_the_tables_foot(name: BodyTable) -> None:
    found = with_body_table(FULL, name)
    whole = together([rigid(found, part, "foot_right") for part in FOOT])
    table = DE_LEVA[name] if name in DE_LEVA else DUMAS[name]
    entry = table["foot"]
    # 0.2581 m from heel to toes in the model; the back of the heel 57 mm behind the ankle.
    along = entry.centre[0] if isinstance(entry, AxesPart) else entry.along
    assert whole.share == pytest.approx(entry.share, rel=1e-12)
    assert whole.centre[0] == pytest.approx(0.2581 * along - 0.057, abs=3e-4)
    np.testing.assert_allclose(radii_of(whole.spread), 0.2581 * np.array(entry.radii), rtol=2e-3)


@pytest.mark.parametrize("sex", ["female", "male"])
def test_hand_and_foot_of_both_tables_are_much_alike(sex: str) -> None:
    # Two samples of people measured in two ways: a loose bound that tells whole feet and hands from parts.
    line, axes = (with_body_table(FULL, f"{table}_{sex}") for table in ("de_leva", "dumas"))
    for parts in (FOOT, ("hand_right",)):
        one, other = (together([rigid(s, p, parts[0]) for p in parts]) for s in (line, axes))
        assert np.linalg.norm(one.centre - other.centre) < 0.030
        np.testing.assert_allclose(radii_of(one.spread), radii_of(other.spread), rtol=0.27)


@pytest.mark.parametrize("name", TABLES)
def test_every_segment_gets_a_body_and_the_sides_are_mirrored(name: BodyTable) -> None:
    found = with_body_table(FULL, name)
    assert kept_by_body_table(FULL, name) == ()
    table = DE_LEVA[name] if name in DE_LEVA else DUMAS[name]
    expected = sum(entry.share * (1 + (part in PAIRED)) for part, entry in table.items())
    assert sum(s.mass_share or 0 for s in found.segments) == pytest.approx(expected)
    for right in found.segments:
        if right.gyration is None or right.centre_of_mass is None:
            continue
        assert (spread_of(right.gyration) > 0).all(), right.name
        if right.name.endswith("_right"):
            left = segment(found, right.name.replace("_right", "_left"))
            mirrored = np.array(right.centre_of_mass) * [1, 1, -1]
            np.testing.assert_allclose(left.centre_of_mass, mirrored, atol=1e-12)
            np.testing.assert_allclose(left.gyration, right.gyration, rtol=1e-12)


# The common centre of a standing person is at 0.55 to 0.57 of stature (from memory, loose bound).
@pytest.mark.parametrize("name", TABLES)
def test_the_whole_bodys_centre_is_as_high_as_a_standing_persons(name: BodyTable) -> None:
    found = with_body_table(FULL, name)
    functions = SkeletonFunctions(found)
    freedoms = functions.kinematics.freedoms
    upright = Posture(
        np.zeros((1, len(freedoms.scalars))), np.tile([1.0, 0, 0, 0], (1, len(freedoms.balls), 1))
    )
    poses = functions.poses(upright, sized_numbers(found, np.eye(3)))
    centre = centre_of_mass(sized_inertias(found), found.segment_names, poses)[0]
    vertex = poses[0, found.segment_index("head")] @ [
        *segment(found, "head").landmarks["vertex"],
        1,
    ]
    sole = vertex[1] - 1.741  # the reference person's stature
    assert 0.53 < (centre[1] - sole) / 1.741 < 0.58
    assert abs(centre[2]) < 0.005


def test_growth_then_applies_as_to_any_number() -> None:
    found = with_body_table(FULL, "dumas_female")
    factors = (1.1, 1.2, 0.9)
    grown = grown_segment(segment(found, "thigh_right"), {"thigh_right": factors})
    before = segment(found, "thigh_right")
    assert before.gyration is not None
    assert grown.gyration is not None
    expected = spread_of(before.gyration) * np.square(factors)
    np.testing.assert_allclose(spread_of(grown.gyration), expected, rtol=1e-12)
    sized = replace(found, subject=Person(1.6, 54.0), sizes={"thigh_right": Size(factors)})
    assert sized_inertias(sized)["thigh_right"].mass == pytest.approx(0.146 * 54.0)


def test_what_a_table_cannot_tell_stays_and_is_named() -> None:
    legs = load_skeleton("lower_limbs")
    # Dumas' pelvis begins at the lumbar joint, and legs alone have none.
    assert kept_by_body_table(legs, "dumas_male") == ("pelvis",)
    assert segment(with_body_table(legs, "dumas_male"), "pelvis") == segment(legs, "pelvis")
    dog = load_skeleton("four_legged")
    kept = kept_by_body_table(dog, "de_leva_male")
    assert all(segment(dog, name).mass is not None for name in kept)


def test_the_choice_is_told_among_the_sources() -> None:
    source = with_body_table(FULL, "dumas_female").sources[-1]
    assert source.startswith("Dumas, Cheze & Verriest 2007")
    assert source.endswith("female (masses, centres, radii of gyration)")


def test_a_model_written_with_a_table_reads_back_with_it(tmp_path: Path) -> None:
    found = with_body_table(load_skeleton("full_body"), "dumas_male")
    tree = tree_with_masses(load_tree("full_body"), found)
    path = tmp_path / "subject.yaml"
    write_subject(
        path,
        tree,
        sizes={},
        placed={},
        subject=None,
        labels={},
        up=None,
        calibration={"by": "hand"},
    )
    again = load_skeleton(path)
    assert again.sources == found.sources
    for ours, theirs in zip(found.segments, again.segments, strict=True):
        assert theirs.name == ours.name
        if ours.mass is not None:
            assert theirs.mass == pytest.approx(ours.mass, rel=1e-6)
            np.testing.assert_allclose(theirs.centre_of_mass, ours.centre_of_mass, atol=1e-7)
            np.testing.assert_allclose(theirs.gyration, ours.gyration, atol=1e-7)


def test_wrong_names_and_a_model_of_nobody_get_a_sentence() -> None:
    with pytest.raises(
        CondyleError,
        match=r"no table of body segments is called 'de_leva'.\n  There are: de_leva_female",
    ):
        with_body_table(FULL, "de_leva")
    with pytest.raises(CondyleError, match=r"describes nobody.*\n  Add person"):
        with_body_table(replace(FULL, person=None), "de_leva_male")
