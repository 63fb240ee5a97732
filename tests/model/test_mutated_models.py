"""Whatever the YAML: a skeleton or a report, never a traceback."""

from __future__ import annotations

import importlib.util
import re
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from ruamel.yaml import YAML

from condyle.model import load_skeleton
from condyle.model.json_schema import model_schema

ROOT = Path(__file__).resolve().parents[2]
FUZZ = ROOT / "benchmarks" / "fuzz_models.py"
FILES = 1000
"""A twentieth of what the benchmark reads."""


@pytest.fixture(scope="module")
def fuzz() -> ModuleType:
    """The benchmark as a module."""
    spec = importlib.util.spec_from_file_location("fuzz_models", FUZZ)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["fuzz_models"] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


def test_a_damaged_model_is_a_skeleton_or_a_report() -> None:
    began = time.process_time()
    command = [sys.executable, str(FUZZ), "--files", str(FILES), "--small", "--seed", "2"]
    told = subprocess.run(command, capture_output=True, text=True, check=False)
    assert told.returncode == 0, told.stdout + told.stderr
    counts = re.search(r"(\d+) still sound, (\d+) reports .* (\d+) faults", told.stdout)
    assert counts, told.stdout
    sound, reports, faults = map(int, counts.groups())
    assert (sound + reports, faults) == (FILES, 0)
    assert min(sound, reports) > FILES / 50
    assert time.process_time() - began < 60  # 10 s where nothing else runs


def test_the_sound_files_of_the_benchmark_are_sound(fuzz: ModuleType, tmp_path: Path) -> None:
    (tmp_path / "bone.stl").write_text("solid")
    (tmp_path / "other.yaml").write_text("condyle: 1\n")
    for text in (fuzz.EVERY_KEY, fuzz.SMALLEST):
        assert fuzz.judge(text.encode(), tmp_path) == (0, None)


def test_the_benchmark_s_own_model_uses_every_key(fuzz: ModuleType) -> None:
    schema = model_schema()
    keys = {key for one in (schema, *schema["$defs"].values()) for key in one["properties"]}
    written = set(re.findall(r"(\w+):", fuzz.EVERY_KEY))
    assert keys - written == {"extends", "reflected"}


def test_the_benchmark_sees_what_it_looks_for(
    fuzz: ModuleType, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A reader that crashes, hangs, or touches what it should not is found out."""

    def reading(action: Callable[[], object]) -> str | None:
        monkeypatch.setattr(fuzz, "load_skeleton", lambda _: action())
        fault: str | None = fuzz.judge(b"condyle: 1", tmp_path)[1]
        return fault

    monkeypatch.setattr(fuzz, "LONGEST", 1)
    assert "ZeroDivisionError" in (reading(lambda: 1 / 0) or "")
    assert reading(lambda: time.sleep(3)) == "more than 1 s"
    assert "touched" in (reading(lambda: Path("/etc/hosts").read_text()) or "")
    assert "touched" in (reading(lambda: (tmp_path / "x").write_text("x")) or "")
    assert "touched" in (reading(lambda: subprocess.run(["true"], check=False)) or "")
    assert "made a" in (reading(lambda: 3) or "")
    assert reading(lambda: load_skeleton("lower_limbs")) is None
    assert reading(lambda: None) is None


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
