"""How much of a trial is noise and how much is movement, read from the trial itself.

Each freedom's frame-by-frame estimates y_k, with variance kappa^2 C_k, are a process with white
p-th differences plus white noise. With W = diag(1 / C) and A(r) = W + r D'D the marginal likelihood,
kappa profiled out, is

    -2 log L = (N - p) log(RSS / (N - p)) + log det A(r) - (N - p) log r,   RSS = min (y - q)'W(y - q) + r |Dq|^2

(Wahba 1985, Ann Stat 13:1378; Kitagawa & Gersch 1996, Smoothness Priors Analysis of Time Series).
It is maximised over r by a search in one dimension; kappa^2 = RSS / (N - p).

The order is four, white snap, unless three explains the trial better by far. The likelihood alone would
take three almost always: it weighs the strong slow part of a spectrum, where any order follows the
data, while acceleration rests on the weak fast part, which falls off more steeply in movement. On
the one measured acceleration at hand (Pezzack, Norman & Winter 1977, J Biomech 10:377) order four
errs by 4.3 rad/s2 and order three by 5.1, though the likelihood prefers three by 0.04 a frame; on
movements of known truth likewise (`benchmarks/trial_estimates.py`). Impacts in noisy recordings prefer
three by 0.08 and more, and there it is right.
"""

from __future__ import annotations

import ctypes
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

from condyle.solver.backends import backend
from condyle.solver.bounded_search import least_between
from condyle.solver.compiled_kernel import address, aligned
from condyle.solver.kernel_source import LANE
from condyle.solver.process_prior import difference_weights

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

ORDERS = (3, 4)
ROUGHER = 0.08
"""Log likelihood per frame by which order three must explain a trial better to be taken."""
MOST_CUTOFF = 0.45
"""Share of the frame rate below which lies the frequency at which movement and noise are taken to be
equal."""
MOST_RATIO = 1e9
"""r in units of the frames' own precision. Beyond it rounding in r D'Dq, some 1e-14 r of q, is no longer
small beside the noise; at 100 frames a second this is a cut-off of 0.5 Hz (order 3) or 1.2 Hz."""
STILL = 1.0
"""In log r: nearer to the greatest one than this, a freedom is said to stand still."""
COARSE_RATIOS, RATIO_TOLERANCE = 9, 0.05
"""Places of the first search in log r, and how far the second goes: r within 5 per cent."""
FEWEST_FRAMES = 20
"""Below this nothing can be read from a series, and it is not smoothed."""
LONGEST_HOLE = 150
"""Frames. At longer runs without an estimate a series is cut into pieces that know nothing of each other:
next to nothing is known across, and over some 400 the system is not positive definite in double
precision any more."""


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the series of a trial say.

    Attributes
    ----------
    order : int
        Of the differences that are taken to be white.
    ratio : (freedoms,)
        r: prior precision of a difference in the units of the frames' cost; 0 where not smoothed.
    kappa : (freedoms,)
        White noise as a share of the markers' sd, as seen in each freedom.
    moving : (freedoms,) bool
        Whether there is more movement in it than the smoothest process that is tried.
    """

    order: int
    ratio: FloatArray
    kappa: FloatArray
    moving: BoolArray


def weigh(
    series: FloatArray,
    variance: FloatArray,
    seen: BoolArray,
    *,
    least_kappa: float,
) -> Evidence:
    """Order, process and noise of a trial.

    Parameters
    ----------
    series : (frames, freedoms)
        Frame-by-frame estimates without jumps of whole turns.
    variance : (frames, freedoms)
        Theirs, were the noise the markers' whole sd.
    seen : (frames, freedoms) bool
        Where there is an estimate.
    least_kappa : float
        A floor: no camera is better than that.
    """
    rough, fine = (_of_order(series, variance, seen, p, least_kappa) for p in ORDERS)
    # A freedom that stands still is as smooth as may be in any order, and decides nothing.
    moving = rough[1].moving & fine[1].moving
    gain = (rough[0] - fine[0])[moving].sum() / max(int(seen[:, moving].sum()), 1)
    return rough[1] if gain > ROUGHER else fine[1]


def _of_order(
    series: FloatArray, variance: FloatArray, seen: BoolArray, order: int, least_kappa: float
) -> tuple[FloatArray, Evidence]:
    """Log likelihoods (freedoms,), and what they are the greatest of."""
    freedoms = series.shape[1]
    ratio, kappa = np.zeros(freedoms), np.full(freedoms, least_kappa)
    likelihood, moving = np.zeros(freedoms), np.zeros(freedoms, dtype=bool)
    alike: dict[tuple[tuple[int, int], ...], list[int]] = {}
    for d in range(freedoms):
        parts = tuple((part.start, part.stop) for part in pieces(seen[:, d]))
        if parts:
            alike.setdefault(parts, []).append(d)
    for group in alike.values():
        one = _SeriesTogether(series[:, group], variance[:, group], seen[:, group], order)
        ratio[group], kappa[group], likelihood[group], moving[group] = one.best(least_kappa)
    return likelihood, Evidence(order, ratio, kappa, moving)


def pieces(seen: BoolArray) -> list[slice]:
    """The parts of a series without a long hole, from their first estimate to their last."""
    at = np.flatnonzero(seen)
    runs = np.split(at, np.flatnonzero(np.diff(at) > LONGEST_HOLE) + 1)
    return [slice(int(r[0]), int(r[-1]) + 1) for r in runs if len(r) >= FEWEST_FRAMES]


def smoothed(series: FloatArray, precision: FloatArray, ratio: float, order: int) -> FloatArray:
    """Series (frames, m) smoothed one by one: min of (y - q)'W(y - q) + r |Dq|^2.

    Straight across long holes, and level beyond the ends.

    Parameters
    ----------
    precision : (frames,)
        W; 0 where a frame says nothing.
    ratio : float
        r.
    """
    result, known = series.copy(), precision > 0
    for part in pieces(known):
        weight, known[part] = precision[part], True
        band = ratio * _squares_band(order, len(weight))
        band[0] += weight
        _, found, info = lapack.dpbsv(band, weight[:, None] * series[part], lower=1)
        if info == 0:
            result[part] = found
    frames = np.arange(len(series))
    if known.any() and not known.all():
        for column in result.T:
            column[~known] = np.interp(frames[~known], frames[known], column[known])
    return result


@dataclass(frozen=True, slots=True)
class _Piece:
    """A part (frames, m) of m series without a long hole; precision in units of each series' median."""

    y: FloatArray
    precision: FloatArray
    order: int
    squares: FloatArray

    def at(self, log_ratios: FloatArray) -> tuple[FloatArray, FloatArray]:
        """RSS and log det A - (N - p) log r; infinite where rounding spoils A."""
        rss, determinant = smoothed_at(
            self.y, self.precision, self.squares, self.order, np.exp(log_ratios)
        )
        return rss, determinant - (len(self.y) - self.order) * log_ratios


def smoothed_at(
    y: FloatArray, precision: FloatArray, squares: FloatArray, order: int, ratios: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """RSS and log det A (m,) of series without holes; infinite where rounding spoils A.

    Parameters
    ----------
    y, precision : (frames, m)
    squares : (order + 1, frames), Fortran order
        The lower band of D'D.
    ratios : (m,)
        r of each series.
    """
    library = backend().library
    if library is None:
        found = [
            _smoothed_by_lapack(y[:, i], precision[:, i], squares, order, ratio)
            for i, ratio in enumerate(ratios)
        ]
        return np.array([rss for rss, _ in found]), np.array([det for _, det in found])
    rss, determinant = np.empty(len(ratios)), np.empty(len(ratios))
    work = aligned(((order + 2) * len(y), LANE))
    given = [y, precision, squares.T, difference_weights(order), ratios]
    told = [np.ascontiguousarray(x, dtype=np.float64) for x in given]
    shape = squares.shape[1], len(ratios)
    if not y.shape == precision.shape == shape or len(squares) != order + 1:
        raise ValueError("series and their precision differ in length")
    library.smooth_series(
        *(ctypes.c_long(x) for x in (len(y), order, len(ratios))),
        *(address(x) for x in (*told, work, rss, determinant)),
    )
    return rss, determinant


def _smoothed_by_lapack(
    y: FloatArray, precision: FloatArray, squares: FloatArray, order: int, ratio: float
) -> tuple[float, float]:
    band = ratio * squares
    band[0] += precision
    rhs = precision * y
    factor, solution, info = lapack.dpbsv(band, rhs[:, None], lower=1, overwrite_ab=1)
    if info != 0:
        return np.inf, np.inf
    x = solution[:, 0]
    rss = float(precision @ (y - x) ** 2) + float(ratio * (np.diff(x, order) ** 2).sum())
    return rss, 2 * float(np.log(factor[0]).sum())


class _SeriesTogether:
    """Some freedoms' estimates, all with the same pieces, and the marginal likelihood of each.

    Parameters
    ----------
    y, variance : (frames, m)
    seen : (frames, m) bool
    order : int
    """

    def __init__(self, y: FloatArray, variance: FloatArray, seen: BoolArray, order: int) -> None:
        self._order = order
        precision = np.where(seen, 1 / np.where(seen, variance, 1.0), 0.0)
        told = [column[here] for column, here in zip(y.T, seen.T, strict=True)]
        self._scale = np.array(
            [np.median(column[here]) for column, here in zip(precision.T, seen.T, strict=True)]
        )
        # A constant costs the process nothing: without it RSS loses fewer digits.
        y = np.where(seen, y - [np.median(column) for column in told], 0.0)
        spread = np.maximum([np.var(column) for column in told], np.finfo(float).tiny)
        self._pieces = []
        self._free, self._constant = np.zeros(y.shape[1]), np.zeros(y.shape[1])
        for part in pieces(seen[:, 0]):
            frames = part.stop - part.start
            squares = _squares_band(order, frames)
            self._pieces.append(_Piece(y[part], precision[part] / self._scale, order, squares))
            self._free += seen[part].sum(axis=0) - order
            self._constant += order * np.log(2 * np.pi * frames * spread)
            self._constant -= _log_determinant(order, frames)
        self._constant += self._free * np.log(2 * np.pi)

    def at(self, log_ratios: FloatArray) -> tuple[FloatArray, FloatArray]:
        """RSS and log det A - (N - p) log r (m,), precisions in units of their median."""
        rss, determinant = np.sum([piece.at(log_ratios) for piece in self._pieces], axis=0)
        return np.maximum(rss, np.finfo(float).tiny), determinant

    def best(self, least_kappa: float) -> tuple[FloatArray, FloatArray, FloatArray, BoolArray]:
        """Give r, kappa and the log likelihood at the maximum, and whether anything moves (m,)."""
        low = -2 * self._order * np.log(2 * np.sin(np.pi * MOST_CUTOFF))
        high = np.log(MOST_RATIO)
        floor = least_kappa**2 / self._scale

        def twice_minus(log_ratios: FloatArray) -> FloatArray:
            rss, determinant = self.at(log_ratios)
            noise = np.maximum(rss / self._free, floor)
            return np.asarray(
                self._free * np.log(noise) + rss / noise + determinant + self._constant
            )

        coarse = np.linspace(low, high, COARSE_RATIOS)
        told = [twice_minus(np.full(len(floor), x)) for x in coarse]
        at = np.argmin(told, axis=0)
        around = coarse[np.maximum(at - 1, 0)], coarse[np.minimum(at + 1, len(coarse) - 1)]
        place, value = least_between(twice_minus, *around, tolerance=RATIO_TOLERANCE)
        noise = np.maximum(self.at(place)[0] / self._free, floor)
        kappa = np.sqrt(noise * self._scale)
        return np.exp(place) * self._scale, kappa, -value / 2, place < high - STILL


def _squares_band(order: int, frames: int) -> FloatArray:
    """The lower band of D'D, (order + 1, frames)."""
    c = difference_weights(order)
    band = np.zeros((order + 1, frames), order="F")
    for later in range(order + 1):
        for earlier in range(later + 1):
            band[later - earlier, earlier : earlier + frames - order] += c[later] * c[earlier]
    return band


def _log_determinant(order: int, frames: int) -> float:
    """Log det(D D').

    The rows of D below the first `order` rows of the identity make a triangle of ones, so det(D D')
    is 1 / det(first rows of an orthonormal basis of the polynomials)^2.
    """
    x = np.linspace(-1.0, 1.0, frames)
    R = np.linalg.qr(np.vander(x, order, increasing=True), mode="r")
    of_basis = float(np.log(np.abs(np.diag(R))).sum())
    # Vandermonde's determinant of the first places.
    apart = [np.log(x[j] - x[i]) for i in range(order) for j in range(i + 1, order)]
    return 2 * (of_basis - float(np.sum(apart)))
