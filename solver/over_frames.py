"""One CasADi function evaluated for all frames at once: the one interface, and the numpy backend.

`over_frames` gives a function in the backend in use. Without a compiler that is the replay: each
instruction of an SX function becomes one numpy operation on a block of frames, so that Python's cost
is paid once per block and not once per frame. What does not fill a block goes to CasADi.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.solver.backends import backend
from condyle.solver.casadi_machine import CasadiMachine
from condyle.solver.compiled_kernel import Compiled
from condyle.solver.lane_program import lane_program

FloatArray = NDArray[np.float64]

BLOCK_FRAMES = 1024
"""Frames per block: what numpy spends on calling each operation is then the smaller part."""
WORTH_A_BLOCK = 256
"""Frames from which a block costs less than CasADi's virtual machine, frame by frame; measured."""


class FrameFunction(Protocol):
    """A function of frames, whatever computes it."""

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate: inputs (frames, n) or, for what all frames share, (n,); outputs (frames, m)."""


def over_frames(function: Any) -> FrameFunction:
    """A CasADi SX function of dense vectors, in the backend in use."""
    used = backend()
    if used.library is not None:
        return Compiled(function, used.library)
    return CasadiMachine(function) if used.name == "casadi" else ReplayOrMachine(function)


_OPERATIONS: dict[int, Callable[..., Any]] = {
    ca.OP_ASSIGN: np.positive,
    ca.OP_NEG: np.negative,
    ca.OP_SIN: np.sin,
    ca.OP_COS: np.cos,
    ca.OP_TAN: np.tan,
    ca.OP_ASIN: np.arcsin,
    ca.OP_ACOS: np.arccos,
    ca.OP_ATAN: np.arctan,
    ca.OP_EXP: np.exp,
    ca.OP_LOG: np.log,
    ca.OP_SQ: np.square,
    ca.OP_SQRT: np.sqrt,
    ca.OP_INV: np.reciprocal,
    ca.OP_FABS: np.abs,
    ca.OP_SIGN: np.sign,
    ca.OP_NOT: np.logical_not,
    ca.OP_ADD: np.add,
    ca.OP_SUB: np.subtract,
    ca.OP_MUL: np.multiply,
    ca.OP_DIV: np.divide,
    ca.OP_POW: np.power,
    ca.OP_CONSTPOW: np.power,
    ca.OP_FMIN: np.fmin,
    ca.OP_FMAX: np.fmax,
    ca.OP_ATAN2: np.arctan2,
    ca.OP_LT: np.less,
    ca.OP_LE: np.less_equal,
    ca.OP_EQ: np.equal,
    ca.OP_NE: np.not_equal,
    ca.OP_AND: np.logical_and,
    ca.OP_OR: np.logical_or,
}


class Replay:
    """An SX function replayed in numpy, block by block.

    Parameters
    ----------
    function : casadi.Function
        Of dense SX vectors.
    block : int
        Frames per block.

    Raises
    ------
    NotImplementedError
        For an operation that no joint needs so far.
    """

    def __init__(self, function: Any, *, block: int = BLOCK_FRAMES) -> None:
        program = lane_program(function, join=False)
        self._program, self._block = program, block
        self._work = np.zeros((program.rows, block))
        self._work[: len(program.constants)] = program.constants[:, None]
        self._steps = [self._step(*row) for row in program.instructions.tolist()]

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate for every frame; at least one input is ``(frames, n)``."""
        program = self._program
        frames = next(len(x) for x in inputs if x.ndim == 2)
        outputs = [np.empty((frames, size)) for size in program.output_sizes]
        for start in range(0, frames, self._block):
            stop = min(start + self._block, frames)
            for x, first, size in zip(
                inputs, program.first_input, program.input_sizes, strict=True
            ):
                rows = self._work[first : first + size]
                if x.ndim == 2:
                    rows[:, : stop - start] = x[start:stop].T
                    rows[:, stop - start :] = x[stop - 1][:, None]
                else:
                    rows[:] = x[:, None]
            self._run()
            for out, first in zip(outputs, program.first_output, strict=True):
                out[start:stop] = self._work[first : first + out.shape[1], : stop - start].T
        return outputs

    def _run(self) -> None:
        with np.errstate(all="ignore"):
            for operation, rows in self._steps:
                operation(*rows)

    def _step(
        self, op: int, target: int, x: int, y: int, _: int
    ) -> tuple[Callable[..., Any], tuple[FloatArray, ...]]:
        work = self._work
        if op == ca.OP_IF_ELSE_ZERO:
            return _value_if, (work[x], work[y], work[target])
        if op == ca.OP_TWICE:
            return np.add, (work[x], work[x], work[target])
        operation = _OPERATIONS[op]
        if getattr(operation, "nin", 1) == 1:
            return operation, (work[x], work[target])
        return operation, (work[x], work[y], work[target])


def _value_if(condition: FloatArray, value: FloatArray, out: FloatArray) -> None:
    """`value` where the condition holds, else 0 (never 0 times NaN)."""
    np.copyto(out, np.where(condition != 0, value, 0.0))


class ReplayOrMachine:
    """A function replayed in numpy where there are frames enough, else evaluated by CasADi.

    Parameters
    ----------
    function : casadi.Function
        Of dense SX vectors.
    """

    def __init__(self, function: Any) -> None:
        self._replay, self._machine = Replay(function), CasadiMachine(function)

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate for every frame; at least one input is ``(frames, n)``."""
        frames = next(len(x) for x in inputs if x.ndim == 2)
        left = frames % BLOCK_FRAMES
        whole = frames - left if left < WORTH_A_BLOCK else frames
        parts = []
        for evaluate, rows in (
            (self._replay, slice(0, whole)),
            (self._machine, slice(whole, frames)),
        ):
            if rows.stop > rows.start:
                parts.append(evaluate(*[x[rows] if x.ndim == 2 else x for x in inputs]))
        if len(parts) == 1:
            return parts[0]
        return [np.concatenate(outputs) for outputs in zip(*parts, strict=True)]
