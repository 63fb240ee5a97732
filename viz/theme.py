"""Light and dark: every colour of a picture that depends on its ground, in one value.

What carries meaning keeps to Okabe and Ito's colours in both; on the dark ground the measured markers take
their lighter blue. Letters keep a contrast of 4.5 to 1 against the ground, as WCAG 2.2 asks (1.4.3).
"""

from __future__ import annotations

from dataclasses import dataclass

from condyle.model.errors import CondyleError
from condyle.viz import palette
from condyle.viz.palette import Colour
from condyle.viz.skeleton_plan import side_of

SKY_BLUE: Colour = (86, 180, 233)
PURPLE: Colour = (204, 121, 167)
YELLOW: Colour = (240, 228, 66)
"""The rest of Okabe and Ito's colours."""

GHOSTS: tuple[Colour, ...] = (PURPLE, palette.GREEN, SKY_BLUE, YELLOW)
"""Of other trials drawn with the one in question, in the order in which they are named."""


class ThemeError(CondyleError):
    """A picture was asked for on a ground that there is not."""


@dataclass(frozen=True, slots=True)
class Theme:
    """The colours of one ground.

    Attributes
    ----------
    sky, ground : the background, at the top and at the foot
    page : round panels
    rule : of faint lines on the page
    ink, soft_ink : of letters
    measured, fitted, alone, residual, left_out : of markers
    outline : around markers, so that they stand out from bone and ground
    right_bone, left_bone, middle_bone : warm on the right, cool on the left
    shadow : of the figure on the floor
    darkest : opacity where the shadow is fullest
    """

    name: str
    page: Colour
    rule: Colour
    sky: Colour
    ground: Colour
    grid: Colour
    ink: Colour
    soft_ink: Colour
    measured: Colour
    alone: Colour
    left_out: Colour
    outline: Colour
    right_bone: Colour
    left_bone: Colour
    middle_bone: Colour
    shadow: Colour
    darkest: float
    fitted: Colour = palette.ORANGE
    residual: Colour = palette.VERMILLION

    def bone(self, segment: str) -> Colour:
        """The colour of a segment's bone, so that left and right can be told in a side view."""
        colours = {"right": self.right_bone, "left": self.left_bone}
        return colours.get(side_of(segment), self.middle_bone)


LIGHT = Theme(
    "light",
    page=(255, 255, 255),
    rule=(226, 230, 236),
    sky=palette.SKY,
    ground=palette.GROUND,
    grid=palette.GRID,
    ink=palette.INK,
    soft_ink=palette.SOFT_INK,
    measured=palette.BLUE,
    alone=palette.PALE_ORANGE,
    left_out=palette.GREY,
    outline=(52, 60, 74),
    right_bone=palette.RIGHT_BONE,
    left_bone=palette.LEFT_BONE,
    middle_bone=palette.MIDDLE_BONE,
    shadow=(38, 48, 66),
    darkest=0.50,
)

DARK = Theme(
    "dark",
    page=(13, 15, 19),
    rule=(52, 58, 68),
    sky=(38, 44, 54),
    ground=(18, 21, 27),
    grid=(128, 142, 164),
    ink=(238, 240, 243),
    soft_ink=(178, 186, 198),
    measured=SKY_BLUE,
    alone=(150, 128, 80),
    left_out=(166, 171, 180),
    outline=(8, 9, 12),
    right_bone=(226, 214, 194),
    left_bone=(172, 186, 204),
    middle_bone=(206, 202, 194),
    shadow=(0, 0, 0),
    darkest=0.75,
)

THEMES = {theme.name: theme for theme in (LIGHT, DARK)}


def theme_called(name: str) -> Theme:
    """The theme of that name.

    Raises
    ------
    ThemeError
        Where there is none.
    """
    if name not in THEMES:
        raise ThemeError(f"no theme is called '{name}'; the themes are {', '.join(THEMES)}.")
    return THEMES[name]
