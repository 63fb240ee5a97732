"""The ground: a grid to judge size by, fading into the background, and a soft shadow on it.

The grid lies on the laboratory's own metres, so it stands still while the person walks. VTK's
shadows fail on unlit things; ours is a texture: the bones' points, thrown down along the light
and blurred the more the higher they were.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

FloatArray = NDArray[np.float64]

WIDE, NARROW = 1.0, 0.25
"""m; the grid's two spacings."""

FLOOR_TOLERANCE = 0.025
"""m; a floor found this near the laboratory's zero is the laboratory's zero."""

SHADOW_PIXELS, ROUGH_SHADOW_PIXELS = 320, 180
"""Across the shadow's square, for stills and for films."""

SHADOW_BANDS = ((0.0, 0.06, 0.011), (0.06, 0.25, 0.022), (0.25, 0.6, 0.045), (0.6, 4.0, 0.085))
"""m; from height, to height, and how wide the shadow of what is there spreads."""


def floor_height(lowest: FloatArray) -> float:
    """The floor's height (m) above the laboratory's zero, from the lowest point of the figure in each posed frame.

    The laboratory's zero where the figure's lowest point is near it, else that lowest point.
    """
    finite = lowest[np.isfinite(lowest)]
    found = float(finite.min()) if len(finite) else 0.0
    return 0.0 if abs(found) <= FLOOR_TOLERANCE else found


def grid_lines(centre: FloatArray, reach: float, spacing: float) -> FloatArray:
    """(lines, points, 2) m: lines at multiples of the spacing, within reach of the centre.

    Lines at multiples of 1 m are left out of the narrow grid. Each is cut into short pieces so
    that it can fade.
    """
    steps = np.linspace(-reach, reach, 61)
    lines = []
    for axis in (0, 1):
        first, last = np.ceil((centre[axis] - reach) / spacing), (centre[axis] + reach) / spacing
        for k in np.arange(first, last + 1e-9):
            if spacing < WIDE and abs(k * spacing / WIDE - round(k * spacing / WIDE)) < 1e-9:
                continue
            line = np.empty((len(steps), 2))
            line[:, axis] = k * spacing
            line[:, 1 - axis] = centre[1 - axis] + steps
            lines.append(line)
    return np.array(lines).reshape(-1, len(steps), 2)


def fade(points: FloatArray, centre: FloatArray, reach: float) -> FloatArray:
    """Opacity in [0, 1]: full at the centre, gone at `reach`."""
    away = np.linalg.norm(points - centre, axis=-1) / reach
    return np.asarray(np.clip(1.0 - away, 0.0, 1.0) ** 1.4)


def shadow_image(
    level_points: FloatArray,
    heights: FloatArray,
    centre: FloatArray,
    half_width: float,
    colour: tuple[int, int, int],
    darkest: float,
    *,
    pixels: int = SHADOW_PIXELS,
) -> NDArray[np.uint8]:
    """(pixels, pixels, 4): the shadow's colour and opacity, its first row at the low second axis.

    Parameters
    ----------
    level_points : (n, 2) m
        Where on the floor the light throws the figure's points.
    heights : (n,) m
        How high above the floor they were.
    darkest : float
        Opacity where the shadow is fullest.
    """
    edges = np.linspace(-half_width, half_width, pixels + 1)
    pixel = edges[1] - edges[0]
    light = np.ones((pixels, pixels))
    for low, high, spread in SHADOW_BANDS:
        inside = (heights >= low) & (heights < high)
        if low == 0.0:
            inside |= heights < 0.0
        x, y = (level_points[inside] - centre).T
        hits, _, _ = np.histogram2d(y, x, bins=(edges, edges))
        covered = gaussian_filter(np.minimum(hits, 1.0).astype(np.float32), spread / pixel)
        light *= 1.0 - np.clip(1.15 * covered, 0.0, 1.0)
    image = np.empty((pixels, pixels, 4), dtype=np.uint8)
    image[..., :3] = colour
    image[..., 3] = np.round(255 * darkest * (1.0 - light))
    return image
