"""A camera from a file: what it holds, and every mistake with its line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from condyle.model.errors import CondyleError
from condyle.viz.camera_file import read_camera

UP = np.array([0.0, 1.0, 0.0])


def written(folder: Path, text: str) -> Path:
    path = folder / "camera.yaml"
    path.write_text(text)
    return path


def test_a_camera_stands_where_its_file_says(tmp_path: Path) -> None:
    text = "position: [2, 1.5, 0.5]\ntarget: [0, 1, 0]\nup: [0, 0, 1]\nfield_of_view: 30\n"
    camera = read_camera(written(tmp_path, text), UP)
    np.testing.assert_array_equal(camera.position, [2.0, 1.5, 0.5])
    np.testing.assert_array_equal(camera.focal_point, [0.0, 1.0, 0.0])
    np.testing.assert_array_equal(camera.up, [0.0, 0.0, 1.0])
    assert camera.view_angle == 30.0


def test_up_and_field_of_view_may_be_left_out(tmp_path: Path) -> None:
    camera = read_camera(written(tmp_path, "position: [2, 1, 0]\ntarget: [0, 1, 0]\n"), UP)
    np.testing.assert_array_equal(camera.up, UP)
    assert camera.view_angle == 22.0


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "this is no camera"),
        ("- 1\n", "1: this is no camera"),
        ("target: [0, 1, 0]\n", "1: position is missing"),
        ("position: [1, 2]\ntarget: [0, 1, 0]\n", "1: position is not three numbers"),
        ("position: [1, 2, x]\ntarget: [0, 1, 0]\n", "1: position is not three numbers"),
        ("position: [1, 2, .inf]\ntarget: [0, 1, 0]\n", "1: position is not three numbers"),
        ("position: [0, 1, 0]\ntarget: [0, 1, 0]\n", "2: position and target are the same"),
        ("position: [0, 3, 0]\ntarget: [0, 1, 0]\n", "1: the camera looks along its own up"),
        ("position: [2, 1, 0]\ntarget: [0, 1, 0]\nup: [0, 0, 0]\n", "3: up has no direction"),
        ("position: [2, 1, 0]\ntarget: [0, 1, 0]\nfield_of_view: 0\n", "3: field_of_view is not"),
        ("position: [2, 1, 0]\ntaget: [0, 1, 0]\n", "Did you mean 'target'"),
    ],
)
def test_a_mistake_is_told_at_its_line(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(CondyleError) as caught:
        read_camera(written(tmp_path, text), UP)
    assert said in str(caught.value)


def test_a_missing_file_is_told(tmp_path: Path) -> None:
    with pytest.raises(CondyleError):
        read_camera(tmp_path / "none.yaml", UP)
