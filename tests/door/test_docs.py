"""What the documents tell a user to do works, and a joint changes on both sides in five lines."""

from __future__ import annotations

import re
from pathlib import Path

import pandas as pd
import pytest
from typer.testing import CliRunner

from condyle.cli import app
from condyle.demo_data import copy_study
from condyle.model import load_skeleton

ROOT = Path(__file__).resolve().parents[2]


def test_a_five_line_file_changes_the_knee_on_both_sides_and_runs(tmp_path: Path) -> None:
    file = ROOT / "docs/examples/free_knee.yaml"
    assert len([line for line in file.read_text().splitlines() if line.strip()]) == 5
    changed = load_skeleton(file)
    shipped = load_skeleton("lower_limbs")
    for side in ("right", "left"):
        knee = next(j for j in changed.joints if j.name == f"knee_{side}")
        assert knee != next(j for j in shipped.joints if j.name == f"knee_{side}")
    copy_study(tmp_path)
    run = CliRunner().invoke
    subject = str(tmp_path / "subject.yaml")
    made = run(app, ["calibrate", str(file), str(tmp_path / "static.c3d"), "-o", subject])
    assert made.exit_code in (0, 1), made.output
    trial = str(tmp_path / "reach_aside.c3d")
    solved = run(app, ["solve", subject, trial, "-o", str(tmp_path / "out")])
    assert solved.exit_code in (0, 1), solved.output
    table = pd.read_parquet(tmp_path / "out/reach_aside/coordinates.parquet")
    free = {c.name for c in changed.coordinates if c.follows is None and "knee" in c.name}
    assert free <= set(table.columns)
    assert {name.removesuffix("_left").removesuffix("_right") for name in free} >= {"knee_flexion"}


@pytest.mark.parametrize(
    "page",
    [
        "README.md",
        "DEVELOPERS.md",
        *sorted(path.relative_to(ROOT).as_posix() for path in (ROOT / "docs").glob("*.md")),
    ],
)
def test_every_link_of_a_page_leads_somewhere(page: str) -> None:
    text = (ROOT / page).read_text()
    for target in re.findall(r"\]\(([^)#]+)\)", text):
        if "://" not in target:
            assert ((ROOT / page).parent / target).exists(), target


def test_every_command_that_readme_shows_exists() -> None:
    text = (ROOT / "README.md").read_text()
    shown = set(re.findall(r"^condyle (\w+)", text, flags=re.MULTILINE))
    known = {command.name or command.callback.__name__ for command in app.registered_commands}
    assert shown
    assert shown <= known


def test_the_page_on_your_own_joint_can_be_followed_word_by_word(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    page = (ROOT / "docs/your-own-joint.md").read_text()
    blocks = re.findall(r"```(\w*)\n(.*?)```", page, flags=re.DOTALL)
    (model,) = [text for kind, text in blocks if kind == "yaml"]
    assert model == (ROOT / "docs/examples/own_knee.yaml").read_text()
    monkeypatch.chdir(tmp_path)
    copy_study(tmp_path)
    Path("own_knee.yaml").write_text(model)
    said = ""
    for _, text in blocks:
        for line in text.splitlines():
            if line.startswith("condyle "):
                result = CliRunner().invoke(app, line.split()[1:])
                assert result.exit_code == 0, result.output
                said += result.stdout
    # Each line that the page shows is a line that the commands print.
    shown = [line for kind, text in blocks if not kind for line in text.splitlines()]
    for line in shown:
        if line and not line.startswith(("condyle ", "own_knee.yaml:", "  Did you mean")):
            assert line in said, line
    summary = pd.read_csv("results/step_up/summary.csv", index_col="name")
    assert summary.loc["knee_adduction_right", "range"] == pytest.approx(16, abs=0.5)
    Path("own_knee.yaml").write_text(model.replace("follows: knee_flexion", "follows: knee_flexon"))
    slip = CliRunner().invoke(app, ["check", "own_knee.yaml"])
    assert "own_knee.yaml:11: no coordinate is called 'knee_flexon_right'." in slip.stderr
    (program,) = [text for kind, text in blocks if kind == "python"]
    scope: dict[str, pd.Series] = {}
    exec(program, scope)  # noqa: S102 - the page's own program
    assert (scope["table"]["knee_rotation_right"] - scope["paper"]).abs().max() < 1e-6
