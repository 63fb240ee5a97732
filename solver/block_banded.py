"""One symmetric system over all frames of a trial by LAPACK: its band, its solution, parts of its inverse.

For where nothing can be compiled; `compiled_trial` does the same.

Unknowns are frame-major (freedom d of frame k stands at k n + d). A process prior of order p couples
frames at most p apart, so everything lies within p n + 2 of the diagonal, and work and memory are
linear in the number of frames. Marginal covariances come from the block recursion of the selected
inverse (Takahashi, Fagan & Chen 1973; for Gaussian Markov chains it is the smoother of Rauch, Tung
& Striebel 1965): with L L' = A in blocks,

    S_next,k = -S_next X,   S_k = (L_k L_k')^-1 + X' S_next X,   X = L_next,k L_k^-1.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import blas, lapack

from condyle.solver.process_prior import ProcessPrior

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

FRAMES_A_BLOCK = 4
"""Frames in a block of the selected inverse; any window of five frames lies in two neighbouring blocks."""


def system_band(H: FloatArray, prior: ProcessPrior, turns: FloatArray) -> FloatArray:
    """The band of frames' blocks H (frames, n, n) with the prior's J'J."""
    band = band_of_frames(H, prior.order * H.shape[1] + (2 if turns.shape[2] else 0))
    prior.add_to_band(band, turns)
    return band


def band_system(
    H: FloatArray,
    prior: ProcessPrior,
    turns: FloatArray,
    held: BoolArray,
    extra: FloatArray | None = None,
) -> Factor | None:
    """The factor of a trial's system; see `trial_system.TrialSystem.solve`."""
    band = system_band(H, prior, turns)
    if extra is not None:
        band[0] += extra.ravel()
    return factored(without(band, held.ravel(), band), in_place=True)


def banded_covariances(
    factor: Factor, wanted: IntArray, scale: FloatArray, begin: IntArray, weights: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """What `trial_system.TrialSystem.covariances` gives, from a factor."""
    frames, points = weights.shape[1:]
    n = factor.band.shape[1] // frames
    found = tuple(np.zeros((frames, len(wanted))) for _ in range(3))
    rows, columns = wanted.T
    for first, joint in selected_inverse(factor, n):
        count = len(joint) // n
        pairs = joint.reshape(count, n, count, n)[:, rows, :, columns]
        own = range(first, min(first + FRAMES_A_BLOCK, frames))
        for k in own:
            found[0][k] = pairs[:, k - first, k - first] * scale
        asked = np.flatnonzero((begin >= first) & (begin < first + FRAMES_A_BLOCK))
        for result, formula in zip(found[1:], weights, strict=True):
            window = np.zeros((len(asked), count))
            for w in range(points):
                window[np.arange(len(asked)), begin[asked] + w - first] = formula[asked, w]
            half = np.einsum("ra,eab->reb", window, pairs)
            result[asked] = np.einsum("rb,reb->re", window, half) * scale
    return found[0], found[1], found[2]


def band_of_frames(H: FloatArray, width: int) -> FloatArray:
    """The lower band of a block-diagonal matrix.

    Parameters
    ----------
    H : (frames, n, n) symmetric
    width : int
        Of the band below the diagonal, at least n - 1.

    Returns
    -------
    (width + 1, frames n), entry [o, j] standing at row j + o, column j; in Fortran order.
    """
    frames, n, _ = H.shape
    band = np.zeros((width + 1, frames * n), order="F")
    by_frame = band.reshape(width + 1, n, frames, order="F")
    for column in range(n):
        by_frame[: n - column, column] = H[:, column:, column].T
    return band


@dataclass(frozen=True, slots=True)
class Factor:
    """The Cholesky factor of a banded matrix, in the same layout."""

    band: FloatArray

    def solve(self, rhs: FloatArray) -> FloatArray:
        """X of A x = rhs, (frames n,)."""
        found, info = lapack.dpbtrs(self.band, rhs[:, None], lower=1)
        if info != 0:
            raise np.linalg.LinAlgError(f"a banded solution failed ({info})")
        return np.asarray(found[:, 0])


def factored(band: FloatArray, *, in_place: bool = False) -> Factor | None:
    """The factor of a banded matrix, None where it is not positive definite.

    In place, the factor stands where the band stood.
    """
    factor, info = lapack.dpbtrf(band, lower=1, overwrite_ab=int(in_place))
    return Factor(factor) if info == 0 else None


def times(band: FloatArray, x: FloatArray) -> FloatArray:
    """A x for a symmetric lower band."""
    width = len(band) - 1
    return np.asarray(blas.dsbmv(width, 1.0, band, x, lower=1))


def without(band: FloatArray, fixed: BoolArray, room: FloatArray | None = None) -> FloatArray:
    """A copy in which the rows and columns of fixed unknowns are those of the identity.

    Parameters
    ----------
    room : array, optional
        To hold the copy; the band itself, to write over it.
    """
    result = np.empty_like(band) if room is None else room
    if result is not band:
        np.copyto(result, band)
    result[:, fixed] = 0.0
    places = np.flatnonzero(fixed)
    for below in range(1, len(band)):
        columns = places - below
        result[below, columns[columns >= 0]] = 0.0
    result[0, fixed] = 1.0
    return result


def selected_inverse(factor: Factor, n: int) -> Iterator[tuple[int, FloatArray]]:
    """Joint covariances of neighbouring blocks of frames, from the last to the first.

    Yields
    ------
    first : int
        The first frame of the earlier block.
    covariance : (b n, b n)
        Of that block's frames followed by the next block's, as far as there are any.
    """
    band = factor.band
    frames = band.shape[1] // n
    starts = list(range(0, frames, FRAMES_A_BLOCK))
    later = np.zeros((0, 0))
    for start in reversed(starts):
        count = min(FRAMES_A_BLOCK, frames - start) * n
        L = _lower_block(band, start * n, count)
        inverse, info = lapack.dtrtri(L, lower=1)
        if info != 0:
            raise np.linalg.LinAlgError("a factor of the trial's system is singular")
        own = inverse.T @ inverse
        if len(later):
            below = _block_below(band, start * n, count, len(later))
            X = below @ inverse
            across = -(later @ X)
            own -= X.T @ across
            joint = np.block([[own, across.T], [across, later]])
        else:
            joint = own
        yield start, joint
        later = own


def _lower_block(band: FloatArray, first: int, count: int) -> FloatArray:
    """The diagonal block of a lower triangular band matrix."""
    block = np.zeros((count, count), order="F")
    for column in range(count):
        height = min(len(band), count - column)
        block[column : column + height, column] = band[:height, first + column]
    return block


def _block_below(band: FloatArray, first: int, count: int, rows: int) -> FloatArray:
    """The block under the diagonal one."""
    block = np.zeros((rows, count), order="F")
    for column in range(count):
        from_diagonal = count - column
        height = min(len(band) - from_diagonal, rows)
        if height > 0:
            block[:height, column] = band[from_diagonal : from_diagonal + height, first + column]
    return block
