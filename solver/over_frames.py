"""One CasADi function evaluated for all frames at once, without a compiler.

CasADi lists the instructions of an SX function; each becomes one numpy operation on a block of
frames, so that Python's cost is paid once per block and not once per frame. A compiled backend can
stand beside it: whatever takes ``(frames, n)`` arrays and returns them serves the solver.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Protocol

import casadi as ca
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

BLOCK_FRAMES = 512
"""Frames per block: a working set of a few thousand rows of this length stays in cache."""


class FrameFunction(Protocol):
    """A function of frames, whatever computes it."""

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate: inputs (frames, n) or, for what all frames share, (n,); outputs (frames, m)."""


_UNARY: dict[int, Callable[..., Any]] = {
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
}
_BINARY: dict[int, Callable[..., Any]] = {
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
        self._sizes_out = [function.numel_out(i) for i in range(function.n_out())]
        self._work = np.zeros((function.sz_w(), block))
        self._block = block
        self._program = [self._instruction(function, k) for k in range(function.n_instructions())]

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate for every frame; at least one input is ``(frames, n)``."""
        frames = next(len(x) for x in inputs if x.ndim == 2)
        columns = [np.ascontiguousarray(x.T) if x.ndim == 2 else x for x in inputs]
        outputs = [np.zeros((size, frames)) for size in self._sizes_out]
        for start in range(0, frames, self._block):
            self._run(columns, outputs, start, min(start + self._block, frames))
        return [np.ascontiguousarray(out.T) for out in outputs]

    def _run(
        self, inputs: Sequence[FloatArray], outputs: Sequence[FloatArray], start: int, stop: int
    ) -> None:
        count = stop - start
        work = self._work[:, :count]
        rows = list(work)
        with np.errstate(all="ignore"):
            for kind, target, operands in self._program:
                if kind == "input":
                    source = inputs[operands[0]]
                    rows[target][:] = (
                        source[operands[1], start:stop] if source.ndim == 2 else source[operands[1]]
                    )
                elif kind == "output":
                    outputs[operands[0]][operands[1], start:stop] = rows[target]
                elif kind == "constant":
                    rows[target][:] = operands[0]
                else:
                    kind(*(rows[i] for i in operands), out=rows[target])

    @staticmethod
    def _instruction(function: Any, k: int) -> tuple[Any, int, tuple[Any, ...]]:
        op = function.instruction_id(k)
        inputs, outputs = function.instruction_input(k), function.instruction_output(k)
        if op == ca.OP_CONST:
            return "constant", outputs[0], (function.instruction_constant(k),)
        if op == ca.OP_INPUT:
            return "input", outputs[0], (inputs[0], inputs[1])
        if op == ca.OP_OUTPUT:
            return "output", inputs[0], (outputs[0], outputs[1])
        if op == ca.OP_TWICE:
            return np.add, outputs[0], (inputs[0], inputs[0])
        if op == ca.OP_IF_ELSE_ZERO:
            return _value_if, outputs[0], tuple(inputs)
        if op == ca.OP_ASSIGN:
            return np.positive, outputs[0], tuple(inputs)
        if op in _UNARY or op in _BINARY:
            return (_UNARY | _BINARY)[op], outputs[0], tuple(inputs)
        raise NotImplementedError(f"no numpy counterpart for CasADi operation {op}")


def _value_if(condition: FloatArray, value: FloatArray, *, out: FloatArray) -> None:
    """`value` where the condition holds, else 0 (never 0 times NaN)."""
    np.copyto(out, np.where(condition != 0, value, 0.0))
