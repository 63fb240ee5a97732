"""Whatever the YAML: a skeleton or a report, never a traceback."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from ruamel.yaml import YAML

from condyle.model import load_skeleton
from condyle.model.errors import Mistake, ModelError

JUNK = [
    "null", "true", "3", "-1", "1e400", ".nan", "-.inf", "99999999999999999999", "''", "x", "-z",
    "laboratory", "upright", "[]", "{}", "[1, 2, 3]", "[[1, 2], [3]]", "{a: {b: {c: 1}}}",
    "[{rotate: [0, 0, 0]}, 3]", "[null, true]", "hip_flexion", "thigh", "{1: 2}", "'\\'", "&a [*a]",
    "!!binary abc", "2024-01-01", "0x10", "[1, 2, [3]]", "{segment: {}}", "1e-320", "'[key]'",
]  # fmt: skip
FILES = 500


def changed(text: str, random: np.random.Generator) -> str:
    """Replace, remove, repeat or exchange pieces of a model's text."""
    for _ in range(int(random.integers(1, 4))):
        lines = text.splitlines()
        at = int(random.integers(len(lines)))
        junk = str(random.choice(JUNK))
        head = lines[at].split(":")[0]
        kind = int(random.integers(6))
        if kind == 0:
            lines[at] = f"{head}: {junk}"
        elif kind == 1:
            del lines[at]
        elif kind == 2:
            lines.insert(at, lines[int(random.integers(len(lines)))])
        elif kind == 3:
            words = lines[at].split(" ")
            words[int(random.integers(len(words)))] = junk
            lines[at] = " ".join(words)
        elif kind == 4:
            where = int(random.integers(len(lines[at]) + 1))
            lines[at] = (
                lines[at][:where]
                + str(random.choice(list("{}[]:,-#&*!'\"x9 ")))
                + lines[at][where:]
            )
        else:
            other = int(random.integers(len(lines)))
            lines[at], lines[other] = lines[other], lines[at]
        text = "\n".join(lines) + "\n"
    return text


def _mistakes_of(path: Path) -> tuple[Mistake, ...]:
    try:
        load_skeleton(path)
    except ModelError as error:
        return error.mistakes
    return ()


def test_a_damaged_model_is_a_skeleton_or_a_report(leg: str, tmp_path: Path) -> None:
    random = np.random.default_rng(20_240_817)
    mirrored = leg.replace("name: leg", "name: leg\nmirror: {_a: _b, thigh: limb}")
    path = tmp_path / "leg.yaml"
    reports = 0
    began = time.perf_counter()
    for number in range(FILES):
        path.write_text(changed(leg if number % 2 else mirrored, random))
        reports += len(_mistakes_of(path)) > 0
    assert FILES / 2 < reports < FILES
    assert time.perf_counter() - began < 20


def test_any_value_may_stand_anywhere(leg: str, report: Callable[..., str], tmp_path: Path) -> None:
    """Every value of the model, one after the other, is replaced by something it cannot be."""
    yaml = YAML(typ="safe", pure=True)
    model = yaml.load(leg)
    random = np.random.default_rng(7)
    junk: list[object] = [
        None,
        True,
        10**30,
        float("nan"),
        "x",
        [],
        {},
        [[1], {"a": [None]}],
        {"x": [1, 2, 3]},
    ]
    places = list(_places(model))
    assert len(places) > 100
    for place in places:
        holder = model
        for step in place[:-1]:
            holder = holder[step]
        kept = holder[place[-1]]
        holder[place[-1]] = junk[int(random.integers(len(junk)))]
        with (tmp_path / "leg.yaml").open("w") as file:
            yaml.dump(model, file)
        holder[place[-1]] = kept
        report((tmp_path / "leg.yaml").read_text())


def _places(value: object, *above: object) -> list[tuple[object, ...]]:
    found: list[tuple[object, ...]] = []
    steps = (
        value.items()
        if isinstance(value, dict)
        else enumerate(value)
        if isinstance(value, list)
        else ()
    )
    for step, child in steps:
        found += [(*above, step), *_places(child, *above, step)]
    return found
