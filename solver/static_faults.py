"""Faults of a static trial that must be refused rather than absorbed into sizes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.recording.recording import Recording
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.matching import root_alignment
from condyle.solver.rigid_alignment import Alignment

FloatArray = NDArray[np.float64]

MIRROR_GAIN = 0.7
"""A mirror image must cut the rigid misfit to below this share to be believed."""


def check_sides(
    functions: SkeletonFunctions, static: Recording, mean: FloatArray, alignment: Alignment
) -> None:
    """Refuse a static whose left and right labels are exchanged.

    Exchanging the sides of every label turns a body into its mirror image, which no rotation can
    lay onto the model; exchanging the sides back must then help.

    Raises
    ------
    FitError
    """
    swapped = _sides_swapped(functions.skeleton.marker_names)
    if not alignment.mirrored[0] or swapped is None:
        return
    other = root_alignment(functions, mean[:, swapped])
    misfit, swapped_misfit = alignment.misfit[0], other.misfit[0]
    if not other.mirrored[0] and swapped_misfit < MIRROR_GAIN * misfit:
        raise FitError(
            f"{static.source}: left and right labels look exchanged: laid on the model, the markers "
            f"miss it by {1000 * misfit:.0f} mm as labelled and by {1000 * swapped_misfit:.0f} mm "
            "with the sides exchanged.\n"
            "  Correct the labels in the recording, or exchange them with --labels MAP.yaml."
        )


def _sides_swapped(names: tuple[str, ...]) -> NDArray[np.int64] | None:
    """Indices that exchange ``_right`` with ``_left`` names; None where there are no pairs."""
    position = {name: i for i, name in enumerate(names)}
    swapped = np.arange(len(names))
    for name, i in position.items():
        twin = None
        if name.endswith("_right"):
            twin = position.get(name.removesuffix("_right") + "_left")
        elif name.endswith("_left"):
            twin = position.get(name.removesuffix("_left") + "_right")
        if twin is not None:
            swapped[i] = twin
    return swapped if (swapped != np.arange(len(names))).any() else None
