"""A picture as a small PNG: a palette of its own colours and of those that carry meaning.

A common palette is chosen by how many pixels have a colour. Markers are few pixels, and would come out grey;
so their colours get places in the palette first, in the shades that light gives them.
"""

from __future__ import annotations

import io

from PIL import Image

from condyle.viz import palette

KEPT = (palette.BLUE, palette.ORANGE, palette.PALE_ORANGE, palette.VERMILLION, palette.GREEN)
SHADES = (0.55, 0.7, 0.85, 1.0)
COLOURS = 256


def few_colours(image: Image.Image) -> bytes:
    """The picture as PNG bytes, at about half their number; the same picture gives the same bytes."""
    image = image.convert("RGB")
    kept = [round(shade * part) for colour in KEPT for shade in SHADES for part in colour]
    common = image.quantize(COLOURS - len(kept) // 3).getpalette() or []
    chosen = Image.new("P", (1, 1))
    chosen.putpalette([*kept, *common][: 3 * COLOURS])
    held = io.BytesIO()
    image.quantize(palette=chosen, dither=Image.Dither.NONE).save(held, format="PNG", optimize=True)
    return held.getvalue()
