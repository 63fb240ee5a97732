"""Every slip a model file can hold is told at its line, with what would be right.

The texts are pinned: they are what a person reads, and scripts may look for them.
"""

from __future__ import annotations

from collections.abc import Callable

import pytest

from condyle.model import shipped_models

# what is wrong, what the sound model has, what stands there instead, the whole report
SLIPS = [
    (
        "an unknown key",
        "thigh: {mass: 9.8,",
        "thigh: {mas: 9.8,",
        (
            "leg.yaml:9: 'mas' is not a key of a segment.\n"
            "  Did you mean 'mass'? The keys of a segment: mass, mass_share, centre_of_mass, gyration, landmarks, length, shapes."
        ),
    ),
    (
        "an unknown segment",
        "from: thigh",
        "from: tigh",
        (
            "leg.yaml:23: no segment is called 'tigh'.\n"
            "  Did you mean 'thigh'? The segments defined here: pelvis, shank, thigh."
        ),
    ),
    (
        "an unknown landmark",
        "at: ASIS}",
        "at: ASSIS}",
        (
            "leg.yaml:33: no landmark is called 'ASSIS'.\n"
            "  Did you mean 'ASIS'? The landmarks defined here: ASIS."
        ),
    ),
    (
        "an unknown coordinate",
        "hip_flexion: {rest_sd",
        "hip_flexoin: {rest_sd",
        (
            "leg.yaml:31: no coordinate is called 'hip_flexoin'.\n"
            "  Did you mean 'hip_flexion'? The coordinates defined here: hip_flexion, knee_axial, knee_flexion, px, py, pz."
        ),
    ),
    (
        "an unknown coordinate to follow",
        "follows: knee_flexion, spline",
        "follows: kne_flexion, spline",
        (
            "leg.yaml:28: no coordinate is called 'kne_flexion'.\n"
            "  Did you mean 'knee_flexion'? The coordinates defined here: hip_flexion, knee_axial, knee_flexion, px, py, pz."
        ),
    ),
    (
        "an unknown marker",
        "name: leg",
        "labels: {ASIX: a}",
        (
            "leg.yaml:2: no marker is called 'ASIX'.\n"
            "  Did you mean 'ASIS'? The markers defined here: ASIS, cluster, thigh_a."
        ),
    ),
    (
        "an unknown base model",
        "name: leg",
        "extends: lower_limb",
        (
            "leg.yaml:2: no base model is called 'lower_limb'.\n"
            "  Did you mean 'lower_limbs'? The base models defined here: "
            f"{', '.join(shipped_models())}."
        ),
    ),
    (
        "an unknown base file",
        "name: leg",
        "extends: other.yaml",
        (
            "leg.yaml:2: there is no file 'other.yaml' beside this one.\n"
            "  Check the path: it begins in the folder of this file."
        ),
    ),
    (
        "a duplicate key",
        "  cluster: {",
        "  thigh_a: {",
        (
            "leg.yaml:35: 'thigh_a' stands here a second time; the first is in line 34.\n"
            "  Keep one of the two."
        ),
    ),
    (
        "a second parent",
        "    to: shank",
        "    to: thigh",
        (
            "leg.yaml:10: no joint reaches the segment 'shank'.\n"
            "  Add a joint `to: shank`, or remove the segment.\n"
            "leg.yaml:24: a second parent for 'thigh': the joint 'hip' carries it.\n"
            "  A segment hangs on one joint: remove one, or add a segment between."
        ),
    ),
    (
        "a cycle",
        "from: pelvis",
        "from: shank",
        (
            "leg.yaml:16: the joints lead round in a circle: 'hip', 'knee'.\n"
            "  Let one of its segments hang on the laboratory, or outside the circle."
        ),
    ),
    (
        "a segment that no joint reaches",
        ("  shank: {}\n"),
        ("  shank: {}\n  toes: {}\n"),
        (
            "leg.yaml:11: no joint reaches the segment 'toes'.\n"
            "  Add a joint `to: toes`, or remove the segment."
        ),
    ),
    (
        "nothing from the laboratory",
        "from: laboratory",
        "from: thigh",
        (
            "leg.yaml:11: no joint comes from the laboratory.\n"
            "  Add a joint `from: laboratory`, for example a floating one.\n"
            "leg.yaml:12: the joints lead round in a circle: 'root', 'hip'.\n"
            "  Let one of its segments hang on the laboratory, or outside the circle.\n"
            "leg.yaml:13: the floating joint 'root' does not hang on the laboratory.\n"
            "  Write `from: laboratory`, or use moves: three that translate, three that rotate."
        ),
    ),
    (
        "a reversed range",
        "range: [-30, 120]",
        "range: [120, -30]",
        (
            "leg.yaml:21: 'range' is [120, -30]: the lower end must come first, and below the upper.\n"
            "  Write two numbers, lower then upper."
        ),
    ),
    (
        "a range that excludes its rest",
        "range: [-30, 120]",
        "range: [10, 120]",
        (
            "leg.yaml:21: the range [10, 120] of 'hip_flexion' excludes its rest, 5.\n"
            "  Change one of them; without a rest, the middle of such a range is taken."
        ),
    ),
    (
        "a zero axis",
        "rotate: -z",
        "rotate: [0, 0, 0]",
        (
            "leg.yaml:27: 'rotate' is [0, 0, 0]: the axis has no direction: its length is zero.\n"
            "  Write x, y, z, -x, -y, -z, or three numbers."
        ),
    ),
    (
        "an axis that is not finite",
        "rotate: -z",
        "rotate: [0, .nan, 0]",
        (
            "leg.yaml:27: 'rotate' cannot be [0, nan, 0].\n"
            "  Write x, y, z, -x, -y, -z, or three numbers."
        ),
    ),
    (
        "an axis of no such name",
        "rotate: -z",
        "rotate: w",
        ("leg.yaml:27: 'rotate' cannot be 'w'.\n  Write x, y, z, -x, -y, -z, or three numbers."),
    ),
    (
        "a mass that is not positive",
        "mass: 9.8",
        "mass: 0",
        ("leg.yaml:9: 'mass' cannot be 0.\n  Write a positive number of kilograms."),
    ),
    (
        "radii that are not positive",
        "gyration: [0.1, 0.1, 0.1]",
        "gyration: [0.1, -0.1, 0.1]",
        (
            "leg.yaml:7: 'gyration' cannot be -0.1.\n"
            "  Write three positive radii in metres, for turning about x, y, z."
        ),
    ),
    (
        "an inertia that no body has",
        "gyration: [0.1, 0.1, 0.1]",
        "gyration: [0.1, 0.1, 0.3]",
        (
            "leg.yaml:7: no body has the gyration radii [0.1, 0.1, 0.3].\n"
            "  The square of each is at most the sum of the other two squares."
        ),
    ),
    (
        "a spline that does not increase",
        "[30, 0.004], [60, 0.001]",
        "[60, 0.004], [30, 0.001]",
        (
            "leg.yaml:28: the spline does not increase: 30 comes after 60.\n"
            "  Sort its points by their first number, each once."
        ),
    ),
    (
        "a circle of follows",
        "coordinate: knee_flexion, range: [-5, 150]",
        "coordinate: knee_flexion, follows: knee_axial, polynomial: [1]",
        (
            "leg.yaml:27: a circle: 'knee_flexion' follows 'knee_axial' follows 'knee_flexion'.\n"
            "  Let one of them be free: remove its `follows`."
        ),
    ),
    (
        "a circle of extends",
        "name: leg",
        "extends: leg.yaml",
        (
            "leg.yaml:2: 'extends' goes round in a circle: 'leg.yaml' builds on this file.\n"
            "  Remove one `extends` of the circle."
        ),
    ),
    (
        "a missing mesh",
        "shank: {}",
        "shank: {shapes: [{mesh: femur.stl}]}",
        (
            "leg.yaml:10: there is no mesh 'femur.stl' in the model's folder.\n"
            "  Put it there, or correct its name."
        ),
    ),
    (
        "a mesh outside the folder",
        "shank: {}",
        "shank: {shapes: [{mesh: ../femur.stl}]}",
        (
            "leg.yaml:10: the mesh '../femur.stl' is not in the model's folder.\n"
            "  Put it beside the model, and name it from there."
        ),
    ),
    (
        "a mesh by its full path",
        "shank: {}",
        "shank: {shapes: [{mesh: /etc/passwd}]}",
        (
            "leg.yaml:10: the mesh '/etc/passwd' is not in the model's folder.\n"
            "  Put it beside the model, and name it from there."
        ),
    ),
    (
        "a bracket that is not closed",
        "shank: {}",
        "shank: {",
        (
            "leg.yaml:12: this is not YAML: expected ',' or '}', but got ':'.\n"
            "  Look at this line and the one above it: brackets, quotes, colons, indentation."
        ),
    ),
    (
        "an alias to nothing",
        "shank: {}",
        "shank: *x",
        ("leg.yaml:10: nothing above is marked '&x'.\n  Write the value out."),
    ),
    (
        "a tag",
        "shank: {}",
        "shank: !!python/object/apply:os.system {}",
        (
            "leg.yaml:10: the tag '!!python/object/apply:os.system' is not part of the model language.\n"
            "  Remove it: a model holds plain values."
        ),
    ),
    (
        "a value instead of a mapping",
        "shank: {}",
        "shank: 3",
        ("leg.yaml:10: 'shank' cannot be 3.\n  Write the keys of a segment, or {}."),
    ),
    (
        "an empty entry",
        "shank: {}",
        "shank:",
        (
            "leg.yaml:10: 'shank' is empty (null), and there is no such entry to remove.\n"
            "  Write its value ({} where it has none), or delete the line."
        ),
    ),
    (
        "an unquoted number as a label",
        "name: leg",
        "labels: {ASIS: 12}",
        ("leg.yaml:2: 'ASIS' cannot be 12.\n  Write {model marker name: label in the recording}."),
    ),
    (
        "an axis sized twice",
        "name: leg",
        "sizing: {segments: {thigh: {along: [y], across: [x, y, z]}}}",
        (
            "leg.yaml:2: the axis y of 'thigh' is listed twice.\n"
            "  Write it once, in `along` or in `across`."
        ),
    ),
    (
        "an axis sized nowhere",
        "name: leg",
        "sizing: {segments: {thigh: {along: [y], across: [x]}}}",
        (
            "leg.yaml:2: the axis z of 'thigh' is neither along nor across.\n"
            "  Add it to one of them, or leave one list out: it takes the rest."
        ),
    ),
    (
        "a segment sized with itself",
        "name: leg",
        "sizing: {segments: {thigh: {with: thigh}}}",
        ("leg.yaml:2: 'thigh' is joined with itself.\n  Name the other segment, or remove `with`."),
    ),
    (
        "a standing value of no coordinate",
        "name: leg",
        "sizing: {standing: {hip_flexoin: [1, 1]}}",
        (
            "leg.yaml:2: no coordinate is called 'hip_flexoin'.\n"
            "  Did you mean 'hip_flexion'? The coordinates defined here: hip_flexion, knee_axial, knee_flexion, px, py, pz, side, tilt, turn."
        ),
    ),
    (
        "sizes of no segment",
        "name: leg",
        "sizes: {thih: {factors: [1, 1, 1]}}",
        (
            "leg.yaml:2: no segment is called 'thih'.\n"
            "  Did you mean 'thigh'? The segments defined here: pelvis, shank, thigh."
        ),
    ),
    (
        "a name taken twice",
        "names: [turn, side, tilt]",
        "names: [turn, side, knee_flexion]",
        (
            "leg.yaml:15: the name 'knee_flexion' of a reported angle is taken by a coordinate.\n"
            "  Give each its own name."
        ),
    ),
    (
        "a sequence that repeats an axis",
        "sequence: [y, x, -z]",
        "sequence: [y, y, -z]",
        (
            "leg.yaml:15: the sequence y, y, -z turns twice in a row about one axis.\n"
            "  Neighbouring turns need different axes, such as [z, x, y]."
        ),
    ),
    (
        "a turned floating joint",
        "to: pelvis",
        ("to: pelvis\n    turned: {axis: x, angle: 3}"),
        (
            "leg.yaml:15: the floating joint 'root' takes no 'turned'.\n"
            "  Its orientation is told relative to upright: remove `turned`."
        ),
    ),
    (
        "a floating joint on a segment",
        (
            "from: pelvis\n"
            "    to: thigh\n"
            "    at: [0, 0, 0.09]\n"
            "    moves:\n"
            "      - {rotate: z, coordinate: hip_flexion, range: [-30, 120], rest: 5}"
        ),
        (
            "from: pelvis\n"
            "    to: thigh\n"
            "    floating: {position: [a, b, hip_flexion], angles: {sequence: [x, y, z], names: [d, e, f]}}"
        ),
        (
            "leg.yaml:17: the floating joint 'hip' does not hang on the laboratory.\n"
            "  Write `from: laboratory`, or use moves: three that translate, three that rotate."
        ),
    ),
    (
        "upright inside the body",
        "at: [0, 0, 0.09]",
        "turned: upright",
        (
            "leg.yaml:19: only a joint from the laboratory can be `turned: upright`, not 'hip'.\n"
            "  Turn it by {axis: ..., angle: ...}."
        ),
    ),
    (
        "a joint of two kinds",
        "at: [0, 0, 0.09]",
        "fixed: true",
        (
            "leg.yaml:19: the joint 'hip' is both moves and fixed.\n"
            "  Keep one. One of a base model is removed by null: `moves: null`."
        ),
    ),
    (
        "a joint of no kind",
        ("to: shank\n    at: [0, -0.42, 0]\n    moves:"),
        ("to: shank\n    at: [0, -0.42, 0]\n    move:"),
        (
            "leg.yaml:22: the joint 'knee' does not say how it moves.\n"
            "  Add one of `floating`, `spherical`, `moves`, `fixed: true`.\n"
            "leg.yaml:26: 'move' is not a key of a joint.\n"
            "  Did you mean 'moves'? The keys of a joint: from, to, at, in_child, turned, floating, spherical, moves, fixed, placed, placed_sd, axis_turn, axis_turn_sd."
        ),
    ),
    (
        "a landmark of the laboratory",
        "to: pelvis",
        ("to: pelvis\n    at: origin"),
        (
            "leg.yaml:15: the laboratory has no landmark 'origin'.\n"
            "  Write three numbers, in metres."
        ),
    ),
    (
        "a share of no person's mass",
        ("person: {stature: 1.75, mass: 70}\n"),
        "",
        (
            "leg.yaml:5: mass_share is refused in a model without `person`.\n"
            "  Add whom the numbers describe, such as `person: {stature: 1.75, mass: 72}`."
        ),
    ),
    (
        "two masses",
        "thigh: {mass: 9.8,",
        "thigh: {mass: 9.8, mass_share: 0.14,",
        ("leg.yaml:9: the segment 'thigh' has both a mass and a mass_share.\n  Keep one of them."),
    ),
    (
        "a stature in centimetres",
        "stature: 1.75",
        "stature: 175",
        ("leg.yaml:3: 'stature' cannot be 175.\n  Write a positive number of metres, up to 3."),
    ),
    (
        "a joint without its parent",
        ("    from: pelvis\n"),
        "",
        ("leg.yaml:16: this joint has no 'from'.\n  Add `from`: a segment, or laboratory."),
    ),
    (
        "a move of two kinds",
        "{rotate: y, coordinate: knee_axial",
        "{rotate: y, translate: y, coordinate: knee_axial",
        (
            "leg.yaml:29: a move says `rotate` or `translate`, and one of them only.\n"
            "  Write an axis, such as `rotate: z`."
        ),
    ),
    (
        "a move without a coordinate",
        "coordinate: hip_flexion, range",
        "range",
        (
            "leg.yaml:21: this move has neither a coordinate nor one that it follows.\n"
            "  Add `coordinate: NAME`, or `follows: NAME` and a function.\n"
            "leg.yaml:31: no coordinate is called 'hip_flexion'.\n"
            "  Did you mean 'knee_flexion'? The coordinates defined here: knee_axial, knee_flexion, px, py, pz."
        ),
    ),
    (
        "a function of nothing",
        "coordinate: hip_flexion, range",
        "coordinate: hip_flexion, polynomial: [1], range",
        (
            "leg.yaml:21: 'polynomial' stands in a move that follows nothing.\n"
            "  Add `follows: NAME`, or remove it."
        ),
    ),
    (
        "two functions",
        "spline: [[0, 0],",
        "polynomial: [1], spline: [[0, 0],",
        (
            "leg.yaml:28: a move that follows has one function, a polynomial or a spline.\n"
            "  Write one, such as `polynomial: [0, 1]`."
        ),
    ),
    (
        "between beside a spline",
        "spline: [[0, 0],",
        "between: [0, 9], spline: [[0, 0],",
        (
            "leg.yaml:28: 'between' belongs to a polynomial.\n"
            "  Remove it: a spline is linear outside its points."
        ),
    ),
    (
        "a range of what follows",
        "polynomial: [0, 0.18]",
        "polynomial: [0, 0.18], range: [0, 9]",
        (
            "leg.yaml:29: 'range' stands in a move that follows another coordinate.\n"
            "  Set it for the coordinate that is followed."
        ),
    ),
    (
        "an override of a reported angle",
        "hip_flexion: {rest_sd",
        "tilt: {rest_sd",
        (
            "leg.yaml:31: 'tilt' is a reported angle and takes no range, rest or held.\n"
            "  Use three rotating moves for the joint, each with its coordinate."
        ),
    ),
    (
        "an override of what follows",
        "hip_flexion: {rest_sd",
        "knee_axial: {rest_sd",
        (
            "leg.yaml:31: 'knee_axial' follows 'knee_flexion' and takes no range, rest or held.\n"
            "  Set them for the coordinate that it follows."
        ),
    ),
    (
        "a coordinate of two units",
        "coordinate: hip_flexion, range",
        "coordinate: px, range",
        (
            "leg.yaml:21: 'px' both rotates and translates.\n"
            "  Use two coordinates, or let one follow the other.\n"
            "leg.yaml:31: no coordinate is called 'hip_flexion'.\n"
            "  Did you mean 'knee_flexion'? The coordinates defined here: knee_axial, knee_flexion, px, py, pz."
        ),
    ),
    (
        "a segment called laboratory",
        ("  shank: {}\n"),
        ("  shank: {}\n  laboratory: {}\n"),
        (
            "leg.yaml:11: 'laboratory' is the recording's own frame and cannot be a segment.\n"
            "  Give the segment another name."
        ),
    ),
    (
        "a misspelled section",
        "markers:",
        "marker:",
        (
            "leg.yaml:32: 'marker' is not a key of a model.\n"
            "  Did you mean 'markers'? The keys of a model: condyle, name, about, sources, extends, mirror, person, segments, joints, coordinates, markers, ties, sizing, sizes, subject, labels, up, calibration."
        ),
    ),
    (
        "another version",
        "condyle: 1",
        "condyle: 2",
        (
            "leg.yaml:1: this version of the model language is not known.\n"
            "  This Condyle reads version 1."
        ),
    ),
    (
        "no version",
        ("condyle: 1\n"),
        "",
        (
            "leg.yaml:1: this is not a model: it does not say `condyle: 1`.\n"
            "  Write `condyle: 1`, the version of the language, first."
        ),
    ),
    (
        "a range that an override moves off its rest",
        "{rest_sd: 60}",
        "{range: [10, 90]}",
        (
            "leg.yaml:31: the range [10, 90] of 'hip_flexion' excludes its rest, 5.\n"
            "  Change one of them; without a rest, the middle of such a range is taken."
        ),
    ),
    (
        "a number too large for a body",
        "mass: 9.8",
        "mass: 99999999999999999999999999999",
        ("leg.yaml:9: 'mass' cannot be 1e+29.\n  Write a positive number of kilograms."),
    ),
]


@pytest.mark.parametrize(
    ("old", "new", "told"), [slip[1:] for slip in SLIPS], ids=[s[0] for s in SLIPS]
)
def test_a_slip_is_told_at_its_line_with_its_remedy(
    report: Callable[..., str], leg: str, old: str, new: str, told: str
) -> None:
    assert old in leg
    assert report(leg.replace(old, new, 1)) == told
