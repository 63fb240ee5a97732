"""Which of three ways the solver's functions are evaluated in: compiled, replayed in numpy, by CasADi.

All give the same answer to rounding; they differ in speed. The compiled kernel is used wherever there
is a C compiler (its one compile takes well under a second, so even short jobs never wait for it),
else the numpy replay. ``CONDYLE_BACKEND`` may name another.
"""

from __future__ import annotations

import ctypes
import os
from dataclasses import dataclass

from condyle.model.errors import FitError
from condyle.solver.compiled_kernel import compiled_kernel
from condyle.solver.kernel_cache import Kernel

VARIABLE = "CONDYLE_BACKEND"
NAMES = ("compiled", "replay", "casadi")


@dataclass(frozen=True, slots=True)
class Backend:
    """How functions of frames are evaluated.

    Attributes
    ----------
    name : one of `NAMES`
    remark : str
        Why it is slower than it could be; empty where all is well.
    library : ctypes.CDLL or None
        The compiled kernel.
    """

    name: str
    remark: str = ""
    library: ctypes.CDLL | None = None


def backend() -> Backend:
    """The backend that functions built now will use.

    Raises
    ------
    FitError
        If ``CONDYLE_BACKEND`` names none that there is.
    """
    asked = os.environ.get(VARIABLE, "") or "compiled"
    if asked not in NAMES:
        raise FitError(
            f"{VARIABLE} is '{asked}', which is no backend.\n"
            f"  Choose one of {', '.join(NAMES)}, or leave it unset."
        )
    if asked != "compiled":
        return Backend(asked)
    kernel = compiled_kernel()
    if isinstance(kernel, Kernel):
        return Backend("compiled", kernel.remark, kernel.library)
    return Backend("replay", f"solving in numpy, which is slower, because {kernel}")
