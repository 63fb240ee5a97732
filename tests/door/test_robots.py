"""The page for robots, run word by word, and what `condyle export` refuses."""

from __future__ import annotations

import json
import re
import shlex
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation
from typer.testing import CliRunner, Result

from condyle.cli import app
from condyle.demo_data import copy_study
from condyle.model import load_skeleton
from condyle.model.elementary import coupled
from condyle.model.errors import CondyleError
from condyle.model.skeleton import Moves
from condyle.solver.robot_motion import motion_table

ROOT = Path(__file__).resolve().parents[2]
PAGE = (ROOT / "docs/robots.md").read_text()
SAME = 1e-9
"""m and rad."""

Run = Callable[[str], Result]


COMMANDS = re.findall(r"^condyle (.*)$", PAGE, flags=re.MULTILINE)
PROGRAMS = re.findall(r"^```python\n(.*?)^```", PAGE, flags=re.MULTILINE | re.DOTALL)


@pytest.fixture(scope="module")
def run() -> Run:
    return lambda line: CliRunner().invoke(app, shlex.split(line))


@pytest.fixture(scope="module")
def followed(tmp_path_factory: pytest.TempPathFactory, run: Run) -> Path:
    """A folder in which every command of the page was run as it stands."""
    folder = tmp_path_factory.mktemp("robots")
    study = copy_study(folder / "study")
    shutil.copy(study.static.recording, folder / "static.c3d")
    shutil.copy(study.trials[0].recording, folder / "walk.c3d")
    shutil.copy(ROOT / "docs/examples/free_knee.yaml", folder)
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        for line in COMMANDS:
            result = run(line)
            assert result.exit_code in (0, 1), f"{line}: {result.output}"
            assert "export" not in line or result.exit_code == 0
    return folder


@pytest.fixture
def inside(followed: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(followed)
    return followed


def joints_of(urdf: Path) -> dict[str, ET.Element]:
    return {joint.attrib["name"]: joint for joint in ET.parse(urdf).getroot().findall("joint")}


def test_the_motion_has_a_column_for_every_moving_joint_of_the_urdf(inside: Path) -> None:
    joints = joints_of(inside / "subject.urdf")
    moving = [name for name, joint in joints.items() if joint.attrib["type"] != "fixed"]
    pose = [f"root.{part}" for part in ("x", "y", "z", "qw", "qx", "qy", "qz")]
    motion = pd.read_csv("walk.csv")
    assert list(motion.columns) == ["time", *pose, *[name for name in moving if name != "root"]]
    solved = pd.read_parquet("results/walk/coordinates.parquet")
    np.testing.assert_array_equal(motion["time"], solved["time"])
    for name in ("hip_flexion_right", "knee_adduction_left", "toes_extension_right"):
        np.testing.assert_allclose(np.degrees(motion[name]), solved[name], rtol=0, atol=1e-12)
    quaternions = motion[pose[3:]].to_numpy()
    assert (np.sum(quaternions[1:] * quaternions[:-1], axis=1) > 0).all()


def test_the_masses_are_the_persons(inside: Path) -> None:
    # de Leva's shares of the segments of lower_limbs, read from the model, times --mass 64.
    shares = sum(s.mass_share or 0.0 for s in load_skeleton("lower_limbs").segments)
    masses = ET.parse("subject.urdf").getroot().findall("link/inertial/mass")
    assert sum(float(m.attrib["value"]) for m in masses) == pytest.approx(64 * shares, rel=1e-12)


def pinocchio_pose(engine: dict[str, Any], link: str) -> NDArray[np.float64]:
    frame = engine["model"].getFrameId(link, engine["pinocchio"].FrameType.BODY)
    return np.array(engine["data"].oMf[frame].homogeneous)[:3]


def mujoco_pose(engine: dict[str, Any], link: str) -> NDArray[np.float64]:
    body = engine["data"].body(link)
    return np.column_stack([body.xmat.reshape(3, 3), body.xpos])


@pytest.mark.parametrize("name", ["mujoco", "pinocchio"])
def test_an_engine_led_by_the_page_finds_every_segment_where_the_trial_has_it(
    inside: Path, name: str
) -> None:
    pytest.importorskip(name, reason="needs two robotics engines: pip install pin mujoco")
    engine: dict[str, Any] = {}
    exec(next(code for code in PROGRAMS if f"import {name}" in code), engine)  # noqa: S102
    pose_of = {"mujoco": mujoco_pose, "pinocchio": pinocchio_pose}[name]
    solved = pd.read_parquet("results/walk/segments.parquet")
    frames = solved["frame"].unique()
    for row in range(0, len(frames), 10):
        engine["place"](row)
        for segment in solved[solved["frame"] == frames[row]].itertuples():
            found = pose_of(engine, segment.segment)
            q = [segment.qw, segment.qx, segment.qy, segment.qz]
            turned = Rotation.from_quat(q, scalar_first=True).as_matrix()
            assert np.linalg.norm(found[:, 3] - [segment.x, segment.y, segment.z]) < SAME
            assert np.linalg.norm(found[:, :3] - turned) < SAME


def test_parquet_holds_the_same_motion(inside: Path, run: Run) -> None:
    assert run("export results/walk --motion walk.parquet").exit_code == 0
    pd.testing.assert_frame_equal(pd.read_parquet("walk.parquet"), pd.read_csv("walk.csv"))


def test_a_table_beside_holds_what_no_straight_line_can_say(inside: Path) -> None:
    table = pd.read_csv("legs_functions.csv")
    skeleton = load_skeleton("lower_limbs")
    knee = next(joint for joint in skeleton.joints if joint.name == "knee_right")
    assert isinstance(knee.motion, Moves)
    flexion = skeleton.coordinate("knee_flexion_right")
    for move in knee.motion.moves[1:]:
        name = move.coordinate or f"knee_right_move_{knee.motion.moves.index(move) + 1}"
        rows = table[table["joint"] == name]
        assert len(rows) == 200
        assert set(rows["driver"]) == {"knee_flexion_right"}
        assert rows["driver_value"].iloc[[0, -1]].tolist() == [flexion.lower, flexion.upper]
        told = [float(coupled(move.function, x)) for x in rows["driver_value"]]
        np.testing.assert_allclose(rows["value"], told, rtol=0, atol=1e-14)
        between = (rows["driver_value"].to_numpy()[1:] + rows["driver_value"].to_numpy()[:-1]) / 2
        guessed = np.interp(between, rows["driver_value"], rows["value"])
        exact = [float(coupled(move.function, x)) for x in between]
        assert np.abs(guessed - exact).max() < np.radians(0.01)
        assert joints_of(inside / "legs.urdf")[name].find("mimic") is None


def test_curves_are_refused_by_name_and_nothing_is_written(inside: Path, run: Run) -> None:
    result = run("export lower_limbs --to refused.urdf")
    assert result.exit_code == 2
    for side in ("right", "left"):
        for name in ("knee_adduction", "knee_rotation"):
            assert f"{name}_{side} follows knee_flexion_{side}" in result.output
        assert f"knee_{side}_move_4 follows" in result.output
    assert "--sampled" in result.output
    assert not list(inside.glob("refused*"))


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("export subject.yaml", "one of --to FILE.urdf"),
        ("export subject.yaml --to a.urdf --motion b.csv", "one of --to FILE.urdf"),
        ("export subject.yaml --to a.xml", "ends in .urdf"),
        ("export lower_limbs --to a.urdf --sampled 1", "2 to 100000 samples"),
        ("export subject.yaml --to a.urdf --subject b.yaml", "--subject says nothing"),
        ("export subject.yaml --to nowhere/a.urdf", "Its folder does not exist"),
        ("export no_model --to a.urdf", "no shipped model is called 'no_model'"),
        ("export results --motion a.csv", "Name one of the trials in it: walk"),
        ("export study --motion a.csv", "this is not one solved trial"),
        ("export results/walk --motion a.txt", "ends in .csv or .parquet"),
        ("export results/walk --motion a.csv --sampled 9", "--sampled says nothing"),
        (
            "export results/walk --motion a.csv --subject free_knee.yaml",
            "is not the subject it was",
        ),
        ("export results/walk --motion a.csv --subject full_body", "full_body, is not there"),
    ],
)
def test_what_cannot_be_done_is_told_in_words(inside: Path, run: Run, line: str, told: str) -> None:
    before = set(inside.iterdir())
    result = run(line)
    assert result.exit_code == 2, result.output
    assert told in result.output
    assert "Traceback" not in result.output
    assert set(inside.iterdir()) == before


def test_a_trial_of_another_skeleton_is_refused(inside: Path) -> None:
    with pytest.raises(CondyleError, match="was not solved with full body"):
        motion_table(Path("results/walk"), load_skeleton("full_body"))


def test_a_subject_that_changed_or_moved_is_told_and_can_be_given(
    followed: Path, tmp_path: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    trial = followed / "results/walk"
    missing = run(f"export {trial} --motion a.csv")
    assert (missing.exit_code, "subject.yaml, is not there" in missing.output) == (2, True)
    (tmp_path / "subject.yaml").write_text("changed: true\n")
    changed = run(f"export {trial} --motion a.csv")
    assert (changed.exit_code, "or has changed since" in changed.output) == (2, True)
    given = run(f"export {trial} --motion a.csv --subject {followed / 'subject.yaml'} --json")
    assert given.exit_code == 0
    assert json.loads(given.output)["files"] == ["a.csv"]
    assert (tmp_path / "a.csv").read_bytes() == (followed / "walk.csv").read_bytes()
