"""What is done to the matrices of all frames at once, in C where there is a compiled kernel."""

from __future__ import annotations

import ctypes

import numpy as np
from numpy.typing import NDArray

from condyle.solver.backends import backend
from condyle.solver.compiled_kernel import address, aligned
from condyle.solver.kernel_source import LANE

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


def symmetric_matrices(values: FloatArray, pairs: NDArray[np.int64], size: int) -> FloatArray:
    """(frames, size, size) Matrices from their entries (frames, entries) at row and column `pairs`."""
    library = backend().library
    frames = len(values)
    if library is None:
        full = np.zeros((frames, size, size))
        rows, columns = pairs.T
        full[:, rows, columns] = values
        full[:, columns, rows] = values
        return full
    full = np.empty((frames, size, size))
    values, pairs = np.ascontiguousarray(values), np.ascontiguousarray(pairs)
    if values.shape[1:] != (len(pairs),) or (len(pairs) and pairs.max() >= size):
        raise ValueError(f"{values.shape[1:]} entries do not fill {len(pairs)} places of {size}")
    library.spread(
        *(ctypes.c_long(x) for x in (frames, size, len(pairs))),
        *(address(x) for x in (pairs, values, full)),
    )
    return full


def symmetric_products(values: FloatArray, pairs: NDArray[np.int64], x: FloatArray) -> FloatArray:
    """M x (frames, size) of symmetric matrices told by their entries, as `symmetric_matrices` takes them."""
    library = backend().library
    (frames, size), found = x.shape, np.zeros(x.shape)
    if values.shape != (frames, len(pairs)) or (len(pairs) and pairs.max() >= size):
        raise ValueError(f"{values.shape} entries do not meet {x.shape} numbers")
    if library is None:
        return np.asarray(np.einsum("nij,nj->ni", symmetric_matrices(values, pairs, size), x))
    values, x = np.ascontiguousarray(values), np.ascontiguousarray(x)
    pairs = np.ascontiguousarray(pairs)
    library.packed_times(
        *(ctypes.c_long(k) for k in (frames, size, len(pairs))),
        *(address(k) for k in (pairs, values, x, found)),
    )
    return found


def inverses(H: FloatArray, usable: BoolArray) -> FloatArray:
    """(frames, n, n) Inverses over the usable freedoms; 0 in the rows of all others.

    Parameters
    ----------
    H : (frames, n, n) symmetric, positive definite over the usable freedoms
    usable : (frames, n) bool
        Their diagonal entries are positive.

    Raises
    ------
    numpy.linalg.LinAlgError
        In numpy, where one is exactly singular; from the compiled kernel that one is not finite.
    """
    library = backend().library
    if library is None:
        unit, scale = unit_diagonal(H, usable)
        return np.asarray(np.linalg.inv(unit) * scale[:, :, None] * scale[:, None, :])
    found = np.empty(H.shape)
    _compiled_inverses(library, H, usable, found)
    return found


def inverse_traces(H: FloatArray, usable: BoolArray) -> FloatArray:
    """(frames,) Traces of the inverses over the usable freedoms, H scaled to a unit diagonal there.

    H and `usable` are as `inverses` takes them; NaN, all of them, where numpy finds one singular.
    """
    library = backend().library
    if library is not None:
        return _compiled_inverses(library, H, usable, None)
    try:
        return np.asarray(np.einsum("nii,nii->n", inverses(H, usable), H))
    except np.linalg.LinAlgError:
        return np.full(len(H), np.nan)


def _compiled_inverses(
    library: ctypes.CDLL, H: FloatArray, usable: BoolArray, found: FloatArray | None
) -> FloatArray:
    """The traces; the inverses go into `found`."""
    frames, n = usable.shape
    if H.shape != (frames, n, n):
        raise ValueError(f"matrices of shape {H.shape} do not fit {n} freedoms of {frames} frames")
    H, told = np.ascontiguousarray(H, dtype=np.float64), np.ascontiguousarray(usable, dtype=bool)
    work, trace = aligned((n * (n + 2), LANE)), np.empty(frames)
    library.inverses(
        ctypes.c_long(frames),
        ctypes.c_long(n),
        *(address(x) for x in (work, H, told)),
        None if found is None else address(found),
        address(trace),
    )
    return trace


def unit_diagonal(H: FloatArray, usable: BoolArray) -> tuple[FloatArray, FloatArray]:
    """H scaled to a unit diagonal, with the scale (frames, n); rows of unusable freedoms are those of I."""
    own = np.einsum("nii->ni", H)
    scale = np.where(usable, 1 / np.sqrt(np.where(usable, own, 1.0)), 0.0)
    unit = H * scale[:, :, None] * scale[:, None, :]
    index = np.arange(H.shape[1])
    unit[:, index, index] = 1.0
    return unit, scale
