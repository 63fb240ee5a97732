"""Drawing without a screen: quiet where it works, one clear line where it does not."""

from __future__ import annotations

import subprocess
import sys

import pytest

from condyle.model.errors import CondyleError
from condyle.viz import offscreen

DRAW = """
from condyle.viz.offscreen import open_pyvista
pyvista = open_pyvista()
plotter = pyvista.Plotter(off_screen=True, window_size=(32, 32))
plotter.add_mesh(pyvista.Sphere())
print(plotter.screenshot(return_img=True).std() > 0)
"""

IMPORT = """
import sys
import condyle.viz.overlays, condyle.viz.scene, condyle.viz.bones
print([name for name in ("pyvista", "vtkmodules", "matplotlib") if name in sys.modules])
"""


def run(script: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True, timeout=120
    )


def test_a_picture_is_drawn_and_nothing_is_said_on_stderr() -> None:
    child = run(DRAW)
    assert child.stdout.strip() == "True"
    assert child.stderr == ""


def test_importing_the_layer_imports_no_drawing_library() -> None:
    assert run(IMPORT).stdout.strip() == "[]"


def test_a_window_that_crashes_counts_as_no_window(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(offscreen, "PROBE", "import os; os.abort()")
    assert not offscreen.can_draw(None)


def test_without_any_window_the_error_names_debians_packages(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(offscreen, "PROBE", "raise SystemExit(1)")
    with pytest.raises(CondyleError, match="libegl1 libgl1-mesa-dri") as caught:
        offscreen.choose_window()
    assert "\n" not in str(caught.value)


def test_a_window_chosen_by_the_user_is_the_only_one_tried(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv(offscreen.WINDOW_VARIABLE, "vtkEGLRenderWindow")
    assert offscreen.candidates() == ("vtkEGLRenderWindow",)
