"""A fiftieth of `benchmarks/calibration.py`: made-up persons with skin that moves, and what movement tells."""

from __future__ import annotations

import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.solver.calibration import calibrate

BENCHMARKS = Path(__file__).resolve().parents[2] / "benchmarks"
PERSONS = 4


@pytest.fixture(scope="module")
def study() -> ModuleType:
    sys.path.insert(0, str(BENCHMARKS))
    try:
        import calibration
    finally:
        sys.path.remove(str(BENCHMARKS))
    return calibration


@pytest.mark.slow
def test_movement_tells_hips_and_knees_and_the_sds_are_right(study: ModuleType) -> None:
    """Asked of medians over 200 persons: hip 4 mm, knee axis 2 degrees; here with room for four."""
    model = study.freed(load_skeleton("lower_limbs"))
    found: dict[str, dict[str, list[float]]] = {"static": {}, "ranges": {}}
    for seed in range(PERSONS):
        person = study.someone(model, 1000 + seed, skin=True)
        for kind, moving in (("static", ()), ("ranges", (person.ranges,))):
            sized = calibrate(model, person.static, moving=moving, stature=study.STATURE)
            assert sized.converged
            for name, values in study.judged(person, sized).items():
                found[kind].setdefault(name, []).extend(values)
    hips = {kind: np.median(told["hip centre, mm"]) for kind, told in found.items()}
    axes = {kind: np.median(told["knee axis, deg"]) for kind, told in found.items()}
    assert hips["ranges"] < 5.0 < hips["static"]
    assert axes["ranges"] < 2.0 < axes["static"]
    assert np.mean(found["ranges"]["joints inside 95 %"]) > 85
    assert np.mean(found["ranges"]["sizes inside 95 %"]) > 85
