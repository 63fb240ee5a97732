"""Every slip in a tie is told at its line, with what would be right.

The texts are pinned: they are what a person reads, and scripts may look for them.
"""

from __future__ import annotations

from collections.abc import Callable

import pytest

# what is wrong, what the sound model has, what stands there instead, the whole report
SLIPS = [
    (
        "a tie from an unknown segment",
        "point: [scapula, AI], meets",
        "point: [scapla, AI], meets",
        (
            "leg.yaml:21: no segment is called 'scapla'.\n"
            "  Did you mean 'scapula'? The segments defined here: bar, laboratory, pelvis, scapula, thigh, thorax."
        ),
    ),
    (
        "a tie to an unknown segment",
        "meets: [bar,",
        "meets: [bat,",
        (
            "leg.yaml:21: no segment is called 'bat'.\n"
            "  Did you mean 'bar'? The segments defined here: bar, laboratory, pelvis, scapula, thigh, thorax."
        ),
    ),
    (
        "a plane of an unknown segment",
        "of: laboratory",
        "of: laboratry",
        (
            "leg.yaml:22: no segment is called 'laboratry'.\n"
            "  Did you mean 'laboratory'? The segments defined here: bar, laboratory, pelvis, scapula, thigh, thorax."
        ),
    ),
    (
        "an ellipsoid of an unknown segment",
        "of: thorax, centre",
        "of: torax, centre",
        (
            "leg.yaml:23: no segment is called 'torax'.\n"
            "  Did you mean 'thorax'? The segments defined here: bar, laboratory, pelvis, scapula, thigh, thorax."
        ),
    ),
    (
        "a distance from an unknown segment",
        "from: [thorax, IJ]",
        "from: [torax, IJ]",
        (
            "leg.yaml:24: no segment is called 'torax'.\n"
            "  Did you mean 'thorax'? The segments defined here: bar, laboratory, pelvis, scapula, thigh, thorax."
        ),
    ),
    (
        "a tie at an unknown landmark",
        "point: [scapula, AI], meets",
        "point: [scapula, IA], meets",
        ("leg.yaml:21: no landmark is called 'IA'.\n  The landmarks defined here: AI."),
    ),
    (
        "a plane through an unknown landmark",
        "of: laboratory, through: [0, 0, 0]",
        "of: scapula, through: IJ",
        ("leg.yaml:22: no landmark is called 'IJ'.\n  The landmarks defined here: AI."),
    ),
    (
        "an ellipsoid about an unknown landmark",
        "centre: IJ",
        "centre: IK",
        ("leg.yaml:23: no landmark is called 'IK'.\n  The landmarks defined here: IJ."),
    ),
    (
        "a distance from an unknown landmark",
        "from: [thorax, IJ]",
        "from: [thorax, JJ]",
        ("leg.yaml:24: no landmark is called 'JJ'.\n  The landmarks defined here: IJ."),
    ),
    (
        "a landmark of the laboratory",
        "through: [0, 0, 0]",
        "through: floor",
        ("leg.yaml:22: the laboratory has no landmark 'floor'.\n  Write three numbers, in metres."),
    ),
    (
        "a tie without its point",
        "grip: {point: [scapula, AI], meets",
        "grip: {meets",
        (
            "leg.yaml:21: this tie has no 'point'.\n"
            "  Add `point`: a segment and a place on it: [hand, [0, -0.09, 0]]."
        ),
    ),
    (
        "a point without its place",
        "point: [scapula, AI], meets",
        "point: [scapula], meets",
        (
            "leg.yaml:21: 'point' cannot be ['scapula'].\n"
            "  Write a segment and a place on it: [hand, [0, -0.09, 0]]."
        ),
    ),
    (
        "a point that is a name alone",
        "point: [scapula, AI], meets",
        "point: scapula, meets",
        (
            "leg.yaml:21: 'point' cannot be 'scapula'.\n"
            "  Write a segment and a place on it: [hand, [0, -0.09, 0]]."
        ),
    ),
    (
        "a point of four",
        "point: [scapula, AI], meets",
        "point: [scapula, 1, 2, 3], meets",
        (
            "leg.yaml:21: 'point' cannot be ['scapula', 1, 2, 3].\n"
            "  Write a segment and a place on it: [hand, [0, -0.09, 0]]."
        ),
    ),
    (
        "a place of two numbers",
        "point: [scapula, AI], meets",
        "point: [scapula, [1, 2]], meets",
        (
            "leg.yaml:21: 'point' cannot be [1, 2].\n"
            "  Write a segment and a place on it: [hand, [0, -0.09, 0]]."
        ),
    ),
    (
        "a tie of no kind",
        ", meets: [bar, [0, 0, 0.25]]",
        "",
        (
            "leg.yaml:21: the tie 'grip' does not say what its point keeps to.\n"
            "  Add one of `meets`, `on_plane`, `on_ellipsoid`, `stays`."
        ),
    ),
    (
        "a tie of two kinds",
        "meets: [bar, [0, 0, 0.25]]",
        "meets: [bar, [0, 0, 0]], stays: {distance: 1, from: [bar, [0, 0, 0]]}",
        (
            "leg.yaml:21: the tie 'grip' is of several kinds: meets and stays.\n"
            "  Keep one, or write two ties. A base model's is removed by `meets: null`."
        ),
    ),
    (
        "a tie of a segment with itself",
        "meets: [bar, [0, 0, 0.25]]",
        "meets: [scapula, [0, 0, 0.25]]",
        (
            "leg.yaml:21: the tie 'grip' joins 'scapula' with itself, which ties nothing.\n"
            "  Name two different segments."
        ),
    ),
    (
        "an ellipsoid of the point's own segment",
        "of: thorax, centre: IJ",
        "of: scapula, centre: AI",
        (
            "leg.yaml:23: the tie 'glide' joins 'scapula' with itself, which ties nothing.\n"
            "  Name two different segments."
        ),
    ),
    (
        "a plane without its normal",
        ", normal: y",
        "",
        (
            "leg.yaml:22: this tie's plane has no 'normal'.\n"
            "  Add `normal`: x, y, z, -x, -y, -z, or three numbers."
        ),
    ),
    (
        "a normal of no direction",
        "normal: y",
        "normal: [0, 0, 0]",
        (
            "leg.yaml:22: 'normal' is [0, 0, 0]: the axis has no direction: its length is zero.\n"
            "  Write x, y, z, -x, -y, -z, or three numbers."
        ),
    ),
    (
        "a normal that is no axis",
        "normal: y",
        "normal: up",
        ("leg.yaml:22: 'normal' cannot be 'up'.\n  Write x, y, z, -x, -y, -z, or three numbers."),
    ),
    (
        "radii that are not positive",
        "radii: [0.1, 0.2, 0.1]",
        "radii: [0.1, 0, 0.1]",
        (
            "leg.yaml:23: 'radii' cannot be 0.\n"
            "  Write three positive numbers of metres, for x, y, z."
        ),
    ),
    (
        "two radii",
        "radii: [0.1, 0.2, 0.1]",
        "radii: [0.1, 0.2]",
        (
            "leg.yaml:23: 'radii' cannot be [0.1, 0.2].\n"
            "  Write three positive numbers of metres, for x, y, z."
        ),
    ),
    (
        "an unknown key of an ellipsoid",
        "radii:",
        "radius:",
        (
            "leg.yaml:23: 'radius' is not a key of a tie's ellipsoid.\n"
            "  Did you mean 'radii'? The keys of a tie's ellipsoid: of, centre, radii.\n"
            "leg.yaml:23: this tie's ellipsoid has no 'radii'.\n"
            "  Add `radii`: three positive numbers of metres, for x, y, z."
        ),
    ),
    (
        "a distance that is not positive",
        "distance: 0.3",
        "distance: 0",
        ("leg.yaml:24: 'distance' cannot be 0.\n  Write a positive number of metres."),
    ),
    (
        "a distance from nowhere",
        "distance: 0.3, from: [thorax, IJ]",
        "distance: 0.3",
        (
            "leg.yaml:24: this tie's distance has no 'from'.\n"
            "  Add `from`: a segment and a place on it: [pelvis, [0, 0, 0.1]]."
        ),
    ),
    (
        "a distance alone",
        "stays: {distance: 0.3, from: [thorax, IJ]}",
        "stays: 0.3",
        (
            "leg.yaml:24: 'stays' cannot be 0.3.\n"
            "  Write {distance: 0.12, from: [pelvis, [0, 0, 0.1]]}."
        ),
    ),
    (
        "an unknown key of a tie",
        "grip: {point",
        "grip: {weight: 3, point",
        (
            "leg.yaml:21: 'weight' is not a key of a tie.\n"
            "  The keys of a tie: point, meets, on_plane, on_ellipsoid, stays, sd."
        ),
    ),
    (
        "an sd of zero",
        "0.25]]}",
        "0.25]], sd: 0}",
        ("leg.yaml:21: 'sd' cannot be 0.\n  Write a positive number of metres."),
    ),
    (
        "a list of ties",
        ("ties:\n"),
        ("ties: [1]\ntied:\n"),
        (
            "leg.yaml:20: 'ties' cannot be [1].\n"
            "  Write names, each with a point and what it keeps to.\n"
            "leg.yaml:21: 'tied' is not a key of a model.\n"
            "  Did you mean 'ties'? The keys of a model: condyle, name, about, sources, extends, mirror, person, segments, joints, coordinates, markers, ties, sizing, sizes, subject, labels, up, calibration."
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
