"""The rigid motion that carries one set of points onto another, for many frames at once.

Umeyama 1991 (IEEE Trans Pattern Anal Mach Intell 13:376): weighted centroids, one singular value
decomposition, and a guard that keeps a reflection from passing as a rotation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Alignment:
    """measured = scale rotation reference + translation, frame by frame.

    Attributes
    ----------
    rotation : (frames, 3, 3)
    translation : (frames, 3)
    scale : (frames,)
        The best scale; the rigid motion itself uses scale 1.
    spread : (frames,)
        Second singular value over the first: 0 where the points lie on one line.
    mirrored : (frames,) bool
        Whether a reflection would fit better than the rotation.
    misfit : (frames,) m
        Weighted RMS distance after the rigid motion, at the best scale.
    points : (frames,) int
        How many points had a weight.
    """

    rotation: FloatArray
    translation: FloatArray
    scale: FloatArray
    spread: FloatArray
    mirrored: NDArray[np.bool_]
    misfit: FloatArray
    points: NDArray[np.int64]


def align(reference: FloatArray, measured: FloatArray, weights: FloatArray) -> Alignment:
    """Align reference points with measured ones.

    Parameters
    ----------
    reference : (points, 3)
    measured : (frames, points, 3), finite wherever the weight is not 0
    weights : (frames, points), 0 where missing

    Returns
    -------
    Alignment
        Identity, at the origin, where a frame has no weight at all.
    """
    measured = np.where(weights[..., None] > 0, measured, 0.0)
    total = np.maximum(weights.sum(axis=1), np.finfo(float).tiny)
    share = weights / total[:, None]
    to, of = share[:, None, :] @ measured, share @ reference
    centred_to = measured - to
    centred_of = reference - of[:, None, :]
    covariance = np.swapaxes(centred_to * share[..., None], 1, 2) @ centred_of
    U, D, Vt = np.linalg.svd(covariance)
    sign = np.where(np.linalg.det(U) * np.linalg.det(Vt) < 0, -1.0, 1.0)
    guard = np.ones_like(D)
    guard[:, 2] = sign
    rotation = (U * guard[:, None, :]) @ Vt
    variance = (share * (centred_of**2).sum(axis=2)).sum(axis=1)
    scale = (D * guard).sum(axis=1) / np.maximum(variance, np.finfo(float).tiny)
    translation = to[:, 0] - np.einsum("nij,nj->ni", rotation, of)
    spread = D[:, 1] / np.maximum(D[:, 0], np.finfo(float).tiny)
    power = (share * (centred_to**2).sum(axis=2)).sum(axis=1)
    misfit = np.sqrt(np.maximum(power - scale**2 * variance, 0.0))
    points = (weights > 0).sum(axis=1)
    return Alignment(rotation, translation, scale, spread, sign < 0, misfit, points)
