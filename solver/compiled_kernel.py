"""A CasADi SX function evaluated for all frames at once by the compiled kernel.

Arrays of numpy go to C as they lie in memory; frames are told apart there and nowhere in Python.
"""

from __future__ import annotations

import ctypes
from functools import cache
from threading import Lock
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.solver.kernel_cache import Kernel, KernelUnavailableError, load_kernel
from condyle.solver.kernel_source import BLOCK, kernel_source
from condyle.solver.lane_program import lane_program

FloatArray = NDArray[np.float64]

ALIGNMENT = 64
"""Bytes; what the widest vector loads ask for."""


@cache
def compiled_kernel() -> Kernel | str:
    """The kernel of this process, or why there is none; asked for once."""
    try:
        return load_kernel(kernel_source())
    except KernelUnavailableError as fault:
        return str(fault)


class Compiled:
    """An SX function carried out by the compiled kernel, block by block.

    Parameters
    ----------
    function : casadi.Function
        Of dense SX vectors.
    library : ctypes.CDLL
        The compiled kernel.

    Raises
    ------
    NotImplementedError
        For an operation that no joint needs so far.
    """

    def __init__(self, function: Any, library: ctypes.CDLL) -> None:
        self._program = lane_program(function, join=True)
        self._carry_out = library.over_frames
        self._work = aligned((self._program.rows, BLOCK))
        self._work[: len(self._program.constants)] = self._program.constants[:, None]
        self._one_at_a_time = Lock()

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate for every frame; at least one input is ``(frames, n)``."""
        program = self._program
        frames = next(len(x) for x in inputs if x.ndim == 2)
        outputs = [np.empty((frames, size)) for size in program.output_sizes]
        placed = list(zip(inputs, program.first_input, program.input_sizes, strict=True))
        arrays, places = [], []
        with self._one_at_a_time:
            for x, first, size in placed:
                if x.ndim == 2:
                    arrays.append(_checked(x, (frames, size)))
                    places += [first, size]
                else:
                    self._work[first : first + size] = _checked(x, (size,))[:, None]
            for first, size in zip(program.first_output, program.output_sizes, strict=True):
                places += [first, size]
            told = np.array(places, dtype=ctypes.c_long)
            self._carry_out(
                address(program.instructions),
                ctypes.c_long(len(program.instructions)),
                address(self._work),
                ctypes.c_long(len(arrays)),
                addresses(arrays),
                ctypes.c_long(len(outputs)),
                addresses(outputs),
                address(told),
                ctypes.c_long(frames),
            )
        return outputs


def _checked(x: FloatArray, shape: tuple[int, ...]) -> FloatArray:
    """An input as the kernel reads it; C would not notice that it is too short."""
    if x.shape != shape:
        raise ValueError(f"an input has shape {x.shape} where {shape} is needed")
    return np.ascontiguousarray(x, dtype=np.float64)


def aligned(shape: tuple[int, int]) -> FloatArray:
    """Zeros whose first number lies where vector loads may begin."""
    room = np.zeros(8 * shape[0] * shape[1] + ALIGNMENT, dtype=np.uint8)
    start = -room.ctypes.data % ALIGNMENT
    return room[start : start + 8 * shape[0] * shape[1]].view(np.float64).reshape(shape)


def address(array: NDArray[Any]) -> ctypes.c_void_p:
    """Where an array begins; it must stay alive while C uses it."""
    # Several times faster than array.ctypes, and a fit asks tens of thousands of times.
    return ctypes.c_void_p(array.__array_interface__["data"][0])


def addresses(arrays: list[FloatArray]) -> ctypes.Array[ctypes.c_void_p]:
    """The same for several arrays."""
    return (ctypes.c_void_p * max(len(arrays), 1))(
        *[x.__array_interface__["data"][0] for x in arrays]
    )
