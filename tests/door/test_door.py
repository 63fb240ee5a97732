"""The package's door stays light, and keeps its promises."""

from __future__ import annotations

import subprocess
import sys

import condyle


def test_importing_condyle_and_asking_for_help_loads_nothing_heavy() -> None:
    code = (
        "import sys, condyle, condyle.cli\n"
        "from typer.testing import CliRunner\n"
        "CliRunner().invoke(condyle.cli.app, ['--help'])\n"
        "heavy = {'pyvista', 'vtk', 'casadi', 'pandas', 'scipy', 'ezc3d', 'numpy'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_solving_draws_nothing_and_loads_no_drawing_library() -> None:
    code = "import sys, condyle; condyle.solve; print('pyvista' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


def test_every_promised_name_is_there() -> None:
    for name in condyle.__all__:
        assert getattr(condyle, name).__doc__
