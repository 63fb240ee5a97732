"""A CasADi function evaluated for all frames by CasADi's own virtual machine, the yardstick of the others.

Blocks of frames go through ``Function.map`` and its buffers: handing over numpy arrays as arguments
would spend most of the time on converting them.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

BLOCKS = (64, 8, 1)
"""Frames per call: as many of the largest blocks as fit, then of the next."""


class CasadiMachine:
    """A function evaluated by CasADi, block by block.

    Parameters
    ----------
    function : casadi.Function
        Of dense vectors.
    """

    def __init__(self, function: Any) -> None:
        self._function = function
        self._sizes_out = [function.numel_out(i) for i in range(function.n_out())]
        self._mapped: dict[tuple[int, tuple[int, ...]], Any] = {}

    def __call__(self, *inputs: FloatArray) -> list[FloatArray]:
        """Evaluate for every frame; at least one input is ``(frames, n)``."""
        frames = next(len(x) for x in inputs if x.ndim == 2)
        given = [np.array(x, dtype=np.float64, order="C") for x in inputs]
        outputs = [np.zeros((frames, size)) for size in self._sizes_out]
        shared = tuple(i for i, x in enumerate(inputs) if x.ndim == 1)
        start = 0
        for block in BLOCKS:
            stop = start + (frames - start) // block * block
            if stop > start:
                self._run(self._map(block, shared), given, outputs, range(start, stop, block))
            start = stop
        return outputs

    @staticmethod
    def _run(mapped: Any, given: list[FloatArray], outputs: list[FloatArray], at: range) -> None:
        buffer, evaluate = mapped.buffer()
        for start in at:
            part = slice(start, start + at.step)
            for i, x in enumerate(given):
                buffer.set_arg(i, (x[part] if x.ndim == 2 else x).reshape(-1).data)
            for i, out in enumerate(outputs):
                buffer.set_res(i, out[part].reshape(-1).data)
            evaluate()

    def _map(self, block: int, shared: tuple[int, ...]) -> Any:
        if (block, shared) not in self._mapped:
            name = f"{self._function.name()}_over_{block}_frames"
            made = self._function.map(name, "serial", block, list(shared), [])
            self._mapped[block, shared] = made
        return self._mapped[block, shared]
