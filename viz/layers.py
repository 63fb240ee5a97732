"""One picture laid over another by depth: see-through things without the graphics library's blending.

Translucent meshes show their own far sides and cost many passes. Here each see-through thing is drawn opaque
and alone, and mixed in afterwards: strongly where nothing is in front of it, faintly or not at all where
something hides it. So a ghost has one even tone, and an axis inside a bone can still be seen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Pixels = NDArray[np.uint8]
Depths = NDArray[np.float32]

FAR = 1.0
"""The depth of a pixel on which nothing was drawn."""

NEARER = 1e-6
"""Of the depth buffer: what is not this much behind counts as in front."""


@dataclass(frozen=True, slots=True)
class Layer:
    """What the camera saw of some things drawn alone.

    Attributes
    ----------
    colour : (height, width, 3)
    depth : (height, width)
        0 nearest, 1 nothing there.
    """

    colour: Pixels
    depth: Depths


def lay_over(
    picture: Pixels, depth: Depths, layer: Layer, *, in_front: float, hidden: float
) -> None:
    """Mix a layer into a picture (height, width, 4: red, green, blue, opacity), in place.

    Parameters
    ----------
    depth : (height, width)
        Of the picture's own opaque things, seen by the same camera.
    in_front, hidden : float
        The layer's opacity where it is in front of them, and where it is behind.
    """
    covered = layer.depth < FAR
    nearer = layer.depth[covered] <= depth[covered] + NEARER
    opacity = np.where(nearer, in_front, hidden)[:, None]
    below = picture[covered].astype(np.float32)
    below_opacity = below[:, 3:] / 255.0
    together = opacity + below_opacity * (1.0 - opacity)
    above = layer.colour[covered].astype(np.float32)
    mixed = above * opacity + below[:, :3] * below_opacity * (1.0 - opacity)
    picture[covered, :3] = np.round(mixed / np.maximum(together, 1e-6))
    picture[covered, 3] = np.round(255.0 * together[:, 0])


def without_ground(over_black: Pixels, over_white: Pixels) -> Pixels:
    """(height, width, 4): colour and opacity of what was drawn over a black and over a white ground.

    Opacity is what the white ground lost, whatever was blended how.
    """
    black, white = over_black.astype(np.float32), over_white.astype(np.float32)
    opacity = np.clip(1.0 - (white - black).mean(axis=2, keepdims=True) / 255.0, 0.0, 1.0)
    colour = np.clip(black / np.maximum(opacity, 1e-6), 0.0, 255.0)
    return np.asarray(np.round(np.concatenate([colour, 255.0 * opacity], axis=2)), dtype=np.uint8)
