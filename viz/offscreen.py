"""Drawing without a screen: which OpenGL to use, and a clear word where there is none.

VTK dies with a segmentation fault, not an exception, where no OpenGL library is installed. So a
child process tries each way of drawing first, once per process; PyVista is imported only after one
of them has worked, and nowhere else than here.
"""

from __future__ import annotations

import os
import subprocess
import sys
from functools import cache
from typing import Any

from condyle.model.errors import CondyleError

WINDOW_VARIABLE = "VTK_DEFAULT_OPENGL_WINDOW"
"""VTK's own variable: the class of window it opens; must be set before the first one."""

EGL, OSMESA = "vtkEGLRenderWindow", "vtkOSOpenGLRenderWindow"
"""Both draw without a display: EGL by the driver or Mesa, OSMesa purely in software."""

PROBE_SECONDS = 60.0
"""A working probe takes one second; a cold disk may take many."""

PROBE = """
import vtkmodules.vtkRenderingOpenGL2
from vtkmodules.vtkCommonCore import vtkLogger
from vtkmodules.vtkRenderingCore import vtkRenderWindow
vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_OFF)
window = vtkRenderWindow()
window.SetOffScreenRendering(1)
window.SetSize(8, 8)
window.Render()
print("drawn")
"""


class NoGraphicsError(CondyleError):
    """Pictures were asked for on a machine that has no OpenGL to draw them with."""


def candidates() -> tuple[str | None, ...]:
    """The windows worth trying, best first; None leaves the choice to VTK."""
    chosen = os.environ.get(WINDOW_VARIABLE)
    if chosen:
        return (chosen,)
    return (EGL, OSMESA) if sys.platform.startswith("linux") else (None,)


def can_draw(window: str | None) -> bool:
    """Whether a child process could draw a small picture in that kind of window."""
    environment = {**os.environ, **({WINDOW_VARIABLE: window} if window else {})}
    try:
        child = subprocess.run(
            [sys.executable, "-c", PROBE],
            env=environment,
            capture_output=True,
            timeout=PROBE_SECONDS,
            check=False,
        )
    except (OSError, subprocess.SubprocessError):
        return False
    return child.returncode == 0 and b"drawn" in child.stdout


def choose_window() -> str | None:
    """The first way of drawing that works here.

    Raises
    ------
    NoGraphicsError
        Where none does.
    """
    for window in candidates():
        if can_draw(window):
            return window
    chosen = os.environ.get(WINDOW_VARIABLE)
    asked = f" by {chosen}, which {WINDOW_VARIABLE} asks for" if chosen else ""
    raise NoGraphicsError(
        f"no picture can be drawn{asked}: no OpenGL answers here. On Debian or Ubuntu, "
        "'apt install libegl1 libgl1-mesa-dri', or libosmesa6 alone, brings it (no graphics card or "
        "screen is needed)."
    )


@cache
def open_pyvista() -> Any:
    """PyVista, ready to draw without a screen and with a quiet stderr; probed once per process.

    Raises
    ------
    NoGraphicsError
        Where there is no OpenGL.
    """
    os.environ.setdefault("EGL_LOG_LEVEL", "fatal")  # Mesa talks about hardware that is not there
    window = choose_window()
    if window:
        os.environ[WINDOW_VARIABLE] = window
    import pyvista  # heavy, and of no use before a window is known to open
    from vtkmodules.vtkCommonCore import vtkLogger

    vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_ERROR)
    return pyvista
