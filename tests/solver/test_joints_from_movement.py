"""The page on joints from movement: its example runs, and its figures on the demo's skin are true."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from condyle.demo_data import copy_study
from condyle.recording import read_recording
from condyle.solver.joints_from_movement import CentreMethod, joint_centre

ROOT = Path(__file__).resolve().parents[2]
PELVIS = ["ASIS_right", "ASIS_left", "PSIS_right", "PSIS_left"]


def test_the_pages_example_runs_word_by_word(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    page = (ROOT / "docs/joints-from-movement.md").read_text()
    (example,) = re.findall(r"```python\n(.*?)```", page, flags=re.DOTALL)
    monkeypatch.chdir(tmp_path)
    told: dict[str, object] = {}
    exec(example, told)  # noqa: S102 - the page's own program
    assert capsys.readouterr().out.count("\n") >= 2
    hip, knee = told["hip"], told["knee"]
    assert hip.doubts == knee.doubts == ()  # type: ignore[attr-defined]
    # Facing the laboratory's -X or +X or aside, a standing person's knee axis is about level.
    assert abs(knee.direction_in_laboratory[0, 2]) < 0.35  # type: ignore[attr-defined]


@pytest.mark.parametrize(("method", "low", "high"), [("spheres", 5, 8), ("symmetrical", 23, 26)])
def test_with_the_demos_skin_the_middle_of_the_hips_is_off_as_the_page_says(
    tmp_path: Path, method: CentreMethod, low: float, high: float
) -> None:
    copy_study(tmp_path)
    off, sd = [], []
    for name in ("step_up", "reach_aside"):
        trial = read_recording(tmp_path / f"{name}.c3d")
        hips = [
            joint_centre(
                trial,
                parent=PELVIS,
                child=[f"GT_{side}", f"thigh_{side}", f"FE_lateral_{side}"],
                method=method,
            )
            for side in ("right", "left")
        ]
        truth = pd.read_parquet(tmp_path / f"truth_{name}.parquet")
        middle = (hips[0].in_laboratory + hips[1].in_laboratory) / 2
        away = middle - truth[["pelvis_x", "pelvis_y", "pelvis_z"]].to_numpy()
        off.append(1000 * np.nanmean(np.linalg.norm(away, axis=1)))
        sd += [1000 * np.linalg.norm(hip.sd) for hip in hips]
    assert low - 0.5 < min(off) < max(off) < high + 0.5
    assert 0.5 < min(sd) < max(sd) < 4.5
