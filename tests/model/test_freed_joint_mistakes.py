"""Every slip in a spherical joint's limits, a freed joint, or what calibration found is told at its line, with what would be right.

The texts are pinned: they are what a person reads, and scripts may look for them.
"""

from __future__ import annotations

from collections.abc import Callable

import pytest

# what is wrong, what the sound model has, what stands there instead, the whole report
SLIPS = [
    (
        "a cone of zero",
        "cone: 60",
        "cone: 0",
        ("leg.yaml:16: 'cone' cannot be 0.\n  Write an angle above 0 and up to 180 degrees."),
    ),
    (
        "a cone beyond all directions",
        "cone: 60",
        "cone: 181",
        ("leg.yaml:16: 'cone' cannot be 181.\n  Write an angle above 0 and up to 180 degrees."),
    ),
    (
        "a reversed twist",
        "twist: [-40, 40]",
        "twist: [40, -40]",
        (
            "leg.yaml:16: 'twist' is [40, -40]: the lower end must come first, and below the upper.\n"
            "  Write two numbers from -180 to 180 degrees, lower then upper."
        ),
    ),
    (
        "a twist of more than half a turn",
        "twist: [-40, 40]",
        "twist: [-190, 40]",
        (
            "leg.yaml:16: 'twist' cannot be -190.\n"
            "  Write two numbers from -180 to 180 degrees, lower then upper."
        ),
    ),
    (
        "a twist that excludes the zero posture",
        "twist: [-40, 40]",
        "twist: [10, 40]",
        (
            "leg.yaml:16: the twist [10, 40] of 'scapula' excludes its rest, 0.\n"
            "  Widen it, or turn the joint's frame by `turned` until 0 lies within."
        ),
    ),
    (
        "a range of a spherical joint",
        "cone: 60",
        "range: [0, 60]",
        (
            "leg.yaml:16: 'range' is not a key of a spherical joint.\n"
            "  Did you mean 'angles'? The keys of a spherical joint: angles, rest_sd, cone, twist."
        ),
    ),
    (
        "a freed joint that is not there",
        "hip: {place_sd",
        "hpi: {place_sd",
        (
            "leg.yaml:27: no joint is called 'hpi'.\n"
            "  Did you mean 'hip'? The joints defined here: back, bar, hip, root, scapula."
        ),
    ),
    (
        "a place_sd that is not positive",
        "place_sd: 0.012",
        "place_sd: 0",
        ("leg.yaml:27: 'place_sd' cannot be 0.\n  Write a positive number of metres."),
    ),
    (
        "an axis_sd that is not positive",
        "axis_sd: 4",
        "axis_sd: -4",
        ("leg.yaml:27: 'axis_sd' cannot be -4.\n  Write a positive number of degrees."),
    ),
    (
        "nothing freed",
        "hip: {place_sd: 0.012, axis_sd: 4}",
        "hip: {}",
        (
            "leg.yaml:27: 'hip' is listed as a freed joint, but nothing of it is freed.\n"
            "  Add `place_sd`, `axis_sd` or `centre_from`, or remove it."
        ),
    ),
    (
        "the place of a floating joint freed",
        "hip: {place_sd: 0.012, axis_sd: 4}",
        "root: {place_sd: 0.012}",
        (
            "leg.yaml:27: 'place_sd' does nothing for 'root': a floating joint's place is its position.\n"
            "  Remove it."
        ),
    ),
    (
        "the axes of a spherical joint freed",
        "hip: {place_sd: 0.012, axis_sd: 4}",
        "scapula: {axis_sd: 4}",
        (
            "leg.yaml:27: 'axis_sd' turns nothing: the joint 'scapula' has no moves.\n"
            "  Remove it, or give the joint moves."
        ),
    ),
    (
        "the axes of a fixed joint freed",
        "hip: {place_sd: 0.012, axis_sd: 4}",
        "back: {axis_sd: 4}",
        (
            "leg.yaml:27: 'axis_sd' turns nothing: the joint 'back' has no moves.\n"
            "  Remove it, or give the joint moves."
        ),
    ),
    (
        "an unknown regression",
        "axis_sd: 4",
        "centre_from: harington_2007",
        (
            "leg.yaml:27: no published regression is called 'harington_2007'.\n"
            "  Did you mean 'harrington_2007'? The published regressions defined here: bell_1990, hara_2016, harrington_2007."
        ),
    ),
    (
        "a regression without its landmarks",
        "axis_sd: 4",
        "centre_from: harrington_2007",
        (
            "leg.yaml:27: harrington_2007 needs landmarks that 'pelvis' does not have: PSIS_left.\n"
            "  Add them, or remove `centre_from`."
        ),
    ),
    (
        "a regression in the laboratory",
        "hip: {place_sd: 0.012, axis_sd: 4}",
        "bar: {centre_from: bell_1990}",
        (
            "leg.yaml:27: bell_1990 needs landmarks that 'laboratory' does not have: ASIS_right, ASIS_left, PSIS_right, PSIS_left.\n"
            "  Add them, or remove `centre_from`."
        ),
    ),
    (
        "an unknown key of a freed joint",
        "axis_sd: 4",
        "axes_sd: 4",
        (
            "leg.yaml:27: 'axes_sd' is not a key of a freed joint.\n"
            "  Did you mean 'axis_sd'? The keys of a freed joint: place_sd, axis_sd, centre_from."
        ),
    ),
    (
        "a joint's place of two numbers",
        "hip: {from",
        "hip: {placed: [0, 0], from",
        ("leg.yaml:18: 'placed' cannot be [0, 0].\n  Write three numbers, in metres."),
    ),
    (
        "a turn of a joint without moves",
        "back: {from",
        "back: {axis_turn: [1, 0, 0], from",
        (
            "leg.yaml:17: 'axis_turn' turns nothing: the joint 'back' has no moves.\n"
            "  Remove it, or give the joint moves."
        ),
    ),
    (
        "a place of a floating joint",
        ("    to: thorax\n"),
        ("    to: thorax\n    placed: [0, 0, 0]\n"),
        (
            "leg.yaml:12: 'placed' does nothing for 'root': a floating joint's place is its position.\n"
            "  Remove it."
        ),
    ),
    (
        "an sd without its place",
        "hip: {from",
        "hip: {placed_sd: [0, 0, 0], from",
        ("leg.yaml:18: 'placed_sd' stands without 'placed'.\n  Add `placed`, or remove it."),
    ),
    (
        "an sd without its turn",
        "hip: {from",
        "hip: {axis_turn_sd: [0, 0, 0], from",
        (
            "leg.yaml:18: 'axis_turn_sd' stands without 'axis_turn'.\n"
            "  Add `axis_turn`, or remove it."
        ),
    ),
    (
        "a marker's sd without its place",
        "placed: [0, 0, 0], ",
        "",
        ("leg.yaml:29: 'placed_sd' stands without 'placed'.\n  Add `placed`, or remove it."),
    ),
    (
        "a negative sd of a place",
        "hip: {from",
        "hip: {placed: [0, 0, 0], placed_sd: [0, -1, 0], from",
        (
            "leg.yaml:18: 'placed_sd' cannot be -1.\n"
            "  Write three numbers that are not negative, in metres."
        ),
    ),
]


@pytest.mark.parametrize(
    ("old", "new", "told"), [slip[1:] for slip in SLIPS], ids=[s[0] for s in SLIPS]
)
def test_a_slip_is_told_at_its_line_with_its_remedy(
    report: Callable[..., str], tied: str, old: str, new: str, told: str
) -> None:
    assert old in tied
    assert report(tied.replace(old, new, 1)) == told


@pytest.mark.parametrize("name", ["harrington_2007", "bell_1990", "hara_2016"])
def test_a_regression_needs_a_centre_to_one_side(
    report: Callable[..., str], tied: str, name: str
) -> None:
    pelvis = tied.replace("PSIS_right:", "PSIS_left: [-0.1, 0, -0.1], PSIS_right:")
    sound = pelvis.replace("axis_sd: 4", f"centre_from: {name}")
    assert report(sound) == ""
    assert report(sound.replace("at: [0, 0, 0.09]", "at: [0, -0.1, 0]")) == (
        f"leg.yaml:27: {name} cannot tell whether 'hip' is the right hip: its z is 0.\n"
        "  Give its `at` a z: above 0 on the right, below on the left."
    )


def test_many_mistakes_are_told_in_one_report(report: Callable[..., str], tied: str) -> None:
    wrong = (
        tied.replace("cone: 60", "cone: 0")
        .replace("normal: y", "normal: w")
        .replace("of: thorax", "of: torax")
        .replace("place_sd: 0.012", "place_sd: 0")
    )
    lines = [line for line in report(wrong).splitlines() if line.startswith("leg.yaml:")]
    assert [line.split(":")[1] for line in lines] == ["16", "22", "23", "27"]
