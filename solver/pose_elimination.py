"""What frames say of a person and of skin once each frame's posture is free to follow.

With a frame's weighted derivatives a (rows by freedoms), b (rows by person) and r its weighted residuals, and H^-1
the inverse of its own normal matrix,

    I - a H^-1 a'

is what its rows still weigh (Schur complement). A marker's rows depend on its unknowns by a number z times an
identity, so the blocks of skin are sums over frames of z z' times 3 x 3 blocks of that matrix: far less work than
products of the frames' whole derivatives, which would be hundreds of columns wide.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class WeightedRows:
    """Derivatives of some frames, weighted; residuals are measured minus modelled.

    Attributes
    ----------
    by_step : (frames, 3 markers + ties, freedoms)
    by_person : (frames, 3 markers + ties, person)
    residual : (frames, 3 markers + ties)
    root : (frames, markers)
        Square roots of the weights.
    """

    by_step: FloatArray
    by_person: FloatArray
    residual: FloatArray
    root: FloatArray


@dataclass(frozen=True, slots=True)
class CommonPart:
    """Of some frames, added up; person first, then three for each row of skin.

    Attributes
    ----------
    information : (common, common)
    gradient : (common,)
        Downhill, the postures following.
    downhill, diagonal : (common,)
        With the postures as they stand.
    """

    information: FloatArray
    gradient: FloatArray
    downhill: FloatArray
    diagonal: FloatArray


def common_part(
    rows: WeightedRows,
    inverse: FloatArray,
    gradient: FloatArray,
    marker: IntArray,
    regressors: FloatArray,
) -> CommonPart:
    """What some frames say of person and skin.

    Parameters
    ----------
    inverse : (frames, freedoms, freedoms)
        Of each frame's normal matrix; 0 where a freedom does not move.
    gradient : (frames, freedoms)
        Downhill for the postures.
    marker, regressors : (rows,), (frames, rows)
        As in `skin_motion.SkinMotion`.
    """
    frames, markers = rows.root.shape
    count, seen = rows.by_person.shape[2], 3 * markers
    size = count + 3 * len(marker)
    times = rows.root[:, marker] * regressors
    of_person = np.swapaxes(rows.by_step, 1, 2) @ rows.by_person
    followed = inverse @ of_person
    step = np.einsum("knj,kj->kn", inverse, gradient)
    a = rows.by_step[:, :seen]

    S, g = np.zeros((size, size)), np.zeros(size)
    S[:count, :count] = np.einsum(
        "krt,kru->tu", rows.by_person, rows.by_person, optimize=True
    ) - np.einsum("knt,knu->tu", of_person, followed, optimize=True)
    left = (rows.by_person[:, :seen] - a @ followed).reshape(frames, markers, 3, count)
    across = np.einsum("krit,kr->tri", left[:, marker], times, optimize=True)
    S[:count, count:] = across.reshape(count, -1)
    S[count:, :count] = S[:count, count:].T
    S[count:, count:] = _of_skin(np.eye(seen) - (a @ inverse) @ np.swapaxes(a, 1, 2), marker, times)

    downhill, diagonal = np.zeros(size), np.zeros(size)
    downhill[:count] = np.einsum("krt,kr->t", rows.by_person, rows.residual, optimize=True)
    residual = rows.residual[:, :seen].reshape(frames, markers, 3)
    downhill[count:] = np.einsum("kri,kr->ri", residual[:, marker], times).ravel()
    taken = np.einsum("krn,kn->kr", a, step).reshape(frames, markers, 3)
    g[:count] = downhill[:count] - np.einsum("knt,kn->t", of_person, step)
    g[count:] = downhill[count:] - np.einsum("kri,kr->ri", taken[:, marker], times).ravel()
    diagonal[:count] = (rows.by_person**2).sum(axis=(0, 1))
    diagonal[count:] = np.repeat((times**2).sum(axis=0), 3)
    return CommonPart(S, g, downhill, diagonal)


def _of_skin(weigh: FloatArray, marker: IntArray, times: FloatArray) -> FloatArray:
    """(3 rows, 3 rows) sum over frames of times times' and 3 x 3 blocks of `weigh`.

    Marker by marker: its rows beside those of all markers, which are padded to the same number.
    """
    frames, markers = len(times), weigh.shape[1] // 3
    members = [np.flatnonzero(marker == m) for m in range(markers)]
    most = max(len(rows) for rows in members)
    padded = np.zeros((markers, frames, most))
    index = np.full((markers, most), -1)
    for m, rows in enumerate(members):
        padded[m, :, : len(rows)] = times[:, rows]
        index[m, : len(rows)] = rows
    kept, axes = index >= 0, np.arange(3)
    blocks = weigh.reshape(frames, markers, 3, markers, 3).transpose(1, 3, 2, 4, 0)
    whole = np.zeros((len(marker), 3, len(marker), 3))
    for m, rows in enumerate(members):
        if not len(rows):
            continue
        own = times[:, rows].T[None, :, None, :] * blocks[m].reshape(markers, 1, 9, frames)
        found = own.reshape(markers, -1, frames) @ padded
        found = found.reshape(markers, len(rows), 3, 3, most).transpose(1, 2, 0, 4, 3)
        whole[np.ix_(rows, axes, index[kept], axes)] = found[:, :, kept]
    return whole.reshape(3 * len(marker), 3 * len(marker))
