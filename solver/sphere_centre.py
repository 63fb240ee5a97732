"""Centre of a ball joint from spheres: each marker of the child keeps its distance from one point.

Gamage & Lasenby 2002 (J Biomech 35:87) minimise sum (|v - c|^2 - mean |v - c|^2)^2 over all markers and
frames; that is linear in c. Noise makes every sphere look smaller, which draws the centre towards
the markers; Halvorsen 2003 (J Biomech 36:999) takes that out, with the noise estimated from the
misfit. Both are re-derived here from that sum; white noise of equal size in every direction is assumed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.recording.recording import is_seen, mean_positions
from condyle.solver.cluster_poses import cluster_poses
from condyle.solver.functional_joints import (
    SINGULAR,
    JointCentre,
    arcs_of,
    carried,
    doubts_about_centre,
    relative_poses,
    slowness,
)

FloatArray = NDArray[np.float64]

CORRECTIONS = 100
"""Rounds of noise and centre at most; each shrinks what is left by the noise over the arc, squared."""
SETTLED = 1e-12
"""m; a centre that moves less than this has settled."""


def sphere_centre(laboratory_from_parent: FloatArray, child: FloatArray) -> JointCentre:
    """The common centre of the spheres on which a segment's markers move.

    Parameters
    ----------
    laboratory_from_parent : (frames, 4, 4) m
    child : (frames, markers, 3) m
        Markers of the child in the laboratory; NaN where missing. Three or more, not on a line: how
        far the child turned is told from them.

    Returns
    -------
    JointCentre
        `conditioning` is the root of the smallest over the largest curvature of the sum.

    Raises
    ------
    FitError
        If too few frames know the parent and three markers of the child.
    """
    laboratory_from_child = cluster_poses(child)
    parent_from_child = relative_poses(laboratory_from_parent, laboratory_from_child)
    spheres = _Spheres.of(_in_parent(laboratory_from_parent, child))
    centre, noise = spheres.unbiased_centre()
    rotation, translation = parent_from_child[:, :3, :3], parent_from_child[:, :3, 3]
    in_child = np.einsum("nji,nj->ni", rotation, centre - translation).mean(axis=0)
    curvature = np.linalg.eigvalsh(spheres.corrected(noise))
    arcs = arcs_of(rotation)
    return JointCentre(
        in_parent=centre,
        in_child=in_child,
        in_laboratory=carried(laboratory_from_parent, centre),
        sd=spheres.sd(centre, noise),
        residual_rms=spheres.residual_rms(centre),
        arcs=arcs,
        conditioning=float(np.sqrt(max(curvature[0], 0.0) / curvature[2])),
        frames=len(parent_from_child),
        doubts=doubts_about_centre(arcs),
    )


def _in_parent(laboratory_from_parent: FloatArray, points: FloatArray) -> FloatArray:
    return (points - laboratory_from_parent[:, None, :3, 3]) @ laboratory_from_parent[:, :3, :3]


@dataclass(frozen=True, slots=True)
class _Spheres:
    """Markers (frames, markers, 3) m in the parent, about their common middle; NaN where missing."""

    places: FloatArray
    middle: FloatArray

    @classmethod
    def of(cls, markers: FloatArray) -> _Spheres:
        middle = np.nanmean(mean_positions(markers), axis=0)
        moving = is_seen(markers).sum(axis=0) > 1
        return cls((markers - middle)[:, moving], middle)

    @property
    def means(self) -> FloatArray:
        """(markers, 3)."""
        return mean_positions(self.places)

    def corrected(self, noise: float) -> FloatArray:
        """(3, 3) A of A c = b, without what noise (sd, m) adds to it."""
        centred = np.nan_to_num(self.places - self.means)
        share = 1 / is_seen(self.places).sum(axis=0)
        A = 2 * np.einsum("nmi,nmj,m->ij", centred, centred, share)
        return np.asarray(A - 2 * np.sum(1 - share) * noise**2 * np.eye(3))

    def solved(self, noise: float) -> FloatArray:
        """(3,) The centre if the noise were this; least squares, so finite for planar motion too."""
        means, seen = self.means, is_seen(self.places)
        share = 1 / seen.sum(axis=0)
        square = np.where(seen, (self.places**2).sum(axis=2), 0.0)
        centred = np.nan_to_num(self.places - means)
        b = np.einsum("nmi,nm,m->i", centred, square, share)
        b -= 2 * noise**2 * ((1 - share)[:, None] * means).sum(axis=0)
        return np.asarray(np.linalg.lstsq(self.corrected(noise), b, rcond=SINGULAR)[0])

    def noise(self, centre: FloatArray) -> float:
        """Sd of a marker, m: the spread of its squared distance is 2 r times that of the distance."""
        away = ((self.places - centre) ** 2).sum(axis=2)
        seen = is_seen(self.places)
        mean = np.nansum(away, axis=0) / seen.sum(axis=0)
        misfit = np.nansum((away - mean) ** 2)
        spare = seen.sum() - seen.shape[1] - 3
        return float(np.sqrt(misfit / spare / (4 * mean.mean())))

    def unbiased_centre(self) -> tuple[FloatArray, float]:
        """The centre (3,) m in the parent, and the noise (sd, m) that goes with it."""
        noise = 0.0
        centre = self.solved(noise)
        for _ in range(CORRECTIONS):
            before, noise = centre, self.noise(centre)
            if np.linalg.eigvalsh(self.corrected(noise))[0] <= 0:
                noise = 0.0  # planar: nothing but noise in one direction, no centre to correct
                centre = self.solved(noise)
                break
            centre = self.solved(noise)
            if np.linalg.norm(centre - before) < SETTLED:
                break
        return centre + self.middle, noise

    def residual_rms(self, centre: FloatArray) -> float:
        """RMS distance of the markers from their spheres, m."""
        away = np.linalg.norm(self.places + self.middle - centre, axis=2)
        return float(np.sqrt(np.nanmean((away - np.nanmean(away, axis=0)) ** 2)))

    def sd(self, centre: FloatArray, noise: float) -> FloatArray:
        """(3,) m: A^-1 cov(b - A c) A^-1, from the misfit frame by frame."""
        A = self.corrected(noise)
        values = np.linalg.eigvalsh(A)
        if values[0] <= SINGULAR * values[2]:
            return np.full(3, np.nan)
        away = ((self.places + self.middle - centre) ** 2).sum(axis=2)
        misfit = away - np.nansum(away, axis=0) / is_seen(self.places).sum(axis=0)
        centred = np.nan_to_num(self.places - self.means)
        share = 1 / is_seen(self.places).sum(axis=0)
        each_frame = np.einsum("nmi,nm,m->ni", centred, np.nan_to_num(misfit), share)
        inverse = np.linalg.inv(A)
        covariance = inverse @ (each_frame.T @ each_frame) @ inverse
        return np.asarray(np.sqrt(slowness(each_frame) * np.diag(covariance)))
