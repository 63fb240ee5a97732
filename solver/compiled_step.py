"""The damped step within bounds, by the compiled kernel: the same as `damped_step`, without zeros.

L'DL over the entries that the model can have, a vector of frames at a time; each frame has an
active set of its own.
"""

from __future__ import annotations

import ctypes
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Freedoms
from condyle.solver.backends import backend
from condyle.solver.compiled_kernel import address, aligned
from condyle.solver.damped_step import (
    LEAST_CURVATURE,
    LEAST_DAMPING,
    LEAST_DIAGONAL,
    MOST_SET_CHANGES,
    QuadraticModel,
    Step,
    Stepper,
    dense_step,
)
from condyle.solver.elimination import elimination_plan
from condyle.solver.kernel_source import LANE
from condyle.solver.packed_matrices import Pattern
from condyle.solver.tie_equations import TieEquations

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ROWS_EACH = 12
"""Vectors of work space for each freedom, besides three for each entry: what the C source counts on."""


def stepper_of(pattern: Pattern) -> Stepper:
    """What finds the steps of a skeleton's fits in the backend in use."""
    library = backend().library
    return dense_step if library is None else CompiledStep(pattern, library)


def joined_pairs(freedoms: Freedoms, ties: TieEquations) -> set[tuple[int, int]]:
    """Pairs of freedoms (row >= column) that terms beside the markers' can join."""
    groups = [np.flatnonzero(ties.moved_by), *np.arange(freedoms.size)[:, None]]
    for ball in range(len(freedoms.balls)):
        here = freedoms.ball_slice(ball)
        groups.append(np.arange(here.start, here.stop))
    return {(int(k), int(j)) for group in groups for k in group for j in group if k >= j}


class CompiledStep:
    """Finds damped steps of problems that share a pattern; see `damped_step.Stepper`.

    Parameters
    ----------
    pattern : Pattern
        Of H and of its correction, both of which come packed.
    library : ctypes.CDLL
        The compiled kernel.
    """

    def __init__(self, pattern: Pattern, library: ctypes.CDLL) -> None:
        self._plan = elimination_plan(pattern.position >= 0)
        self._places = pattern.position.ravel()[self._plan.places].astype(np.int32)
        self._stored = len(pattern)
        self._find = library.damped_steps

    def __call__(
        self, model: QuadraticModel, low: FloatArray, high: FloatArray, active: IntArray
    ) -> Step:
        """Minimise each damped model within its bounds; see `damped_step.Stepper`."""
        plan, (frames, n) = self._plan, model.g.shape
        if model.H.shape != (frames, self._stored):
            raise ValueError(f"H has shape {model.H.shape}, not {(frames, self._stored)}: packed")
        late = np.full(frames, -1, dtype=np.int64)
        late[model.late] = np.arange(len(model.late))
        step, gain = np.empty((frames, n)), np.empty(frames)
        found = np.empty((frames, n), dtype=np.int64)
        floats = [model.H, model.bend, model.damping, model.g, low, high]
        given = [np.ascontiguousarray(x, dtype=np.float64) for x in floats]
        guess = np.ascontiguousarray(active, dtype=np.int64)
        work = aligned((ROWS_EACH * n + 3 * (n + plan.entries), LANE))
        limits = np.array([LEAST_DAMPING, LEAST_DIAGONAL, LEAST_CURVATURE])
        tables = [plan.starts, plan.later, plan.targets, self._places, plan.order]
        arrays: Sequence[NDArray[Any]] = [*tables, *given, late, guess, step, found, gain, limits]
        self._find(
            ctypes.c_long(n),
            ctypes.c_long(plan.entries),
            ctypes.c_long(self._stored),
            ctypes.c_long(MOST_SET_CHANGES),
            ctypes.c_long(frames),
            address(work),
            *[address(x) for x in arrays],
        )
        return Step(step, found, gain)
