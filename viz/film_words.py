"""The words of a film: what stays is written once, what runs along is written on each picture.

Below the figure the error's course over the film is drawn, with a dot that runs along it: one sees at once
whether the picture in view is one of the bad ones.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz.drawn_markers import place_markers
from condyle.viz.extras import Forces, force_entry
from condyle.viz.film_plan import FilmPlan
from condyle.viz.floor import NARROW, WIDE
from condyle.viz.frame_figures import CAUTION, frame_figures
from condyle.viz.legend import legend_entries
from condyle.viz.lettering import NOTE, Setting, Words, set_words
from condyle.viz.look import Look
from condyle.viz.palette import text_width, write
from condyle.viz.viewpoint import Room

FloatArray = NDArray[np.float64]

STRIP = 3.4
"""Height of the error's course, in body letters."""

SMOOTH = 3
COLUMN_GAP = 1.6
"""Body letters between the columns of the running line."""

FLOOR = f"Floor lines {NARROW:g} m and {WIDE:g} m apart."

LOOKED_AT = 40
"""Rows whose markers decide what the legend must name."""


def film_words(
    motion: FittedMotion, rows: Sequence[int], look: Look, forces: Sequence[Forces] | None
) -> Words:
    """What stays in every picture; the running line is an empty one here, to keep its place."""
    some = np.unique(np.asarray(rows)[np.linspace(0, len(rows) - 1, LOOKED_AT).astype(int)])
    drawn = [place_markers(motion, int(row), exaggeration=look.exaggeration) for row in some]
    legend = legend_entries(motion, drawn, exaggeration=look.exaggeration, theme=look.theme)
    if forces is not None:
        legend.append(force_entry(forces[0].scale))
    title = f"{motion.name}: fitted skeleton and measured markers"
    return Words(title, motion.name, [" "], legend, [CAUTION, FLOOR])


def speed_text(speed: float) -> str:
    """How fast the film runs, in words."""
    if abs(speed - 1.0) < 1e-9:
        return "real time"
    if speed < 1.0:
        return f"{1.0 / speed:.3g} times slower"
    return f"{speed:.3g} times faster"


class FilmWords:
    """Writes on the pictures of one film.

    Parameters
    ----------
    motion, plan, look, forces : of the film
    """

    def __init__(
        self,
        motion: FittedMotion,
        plan: FilmPlan,
        look: Look,
        forces: Sequence[Forces] | None = None,
    ) -> None:
        self.motion, self.plan, self.look = motion, plan, look
        self.setting = film_setting(motion, plan.rows.tolist(), look, forces)
        self._rms = 1000.0 * motion.rms_of_frames()[plan.rows]
        self._columns = self._column_places()
        self._overlay = self._draw_overlay()

    def write(self, image: Image.Image, picture: int) -> None:
        """Write everything on one picture of the film."""
        image.paste(self._overlay, (0, 0), self._overlay)
        letters, theme = self.setting.letters, self.look.theme
        draw = ImageDraw.Draw(image)
        down = self.setting.first_line
        for x, text in zip(self._columns, self._running(picture), strict=True):
            write(draw, (x, down), text, letters, colour=theme.ink)
        value = self._rms[picture]
        x, y = self._across(picture), self._down(value)
        top, foot = self._strip_box()[1], self._strip_box()[3]
        draw.line((x, top, x, foot), fill=theme.left_out, width=max(1, round(0.08 * letters)))
        if np.isfinite(value):
            r = 0.28 * letters
            draw.ellipse((x - r, y - r, x + r, y + r), fill=theme.fitted, outline=theme.ink)

    def _running(self, picture: int) -> list[str]:
        figures = frame_figures(self.motion, int(self.plan.rows[picture]))
        left = figures.missing + figures.left_out
        return [
            f"t = {figures.time:.2f} s",
            f"frame {figures.frame}",
            speed_text(self.plan.speed),
            f"RMS {figures.rms_mm:.1f} mm" if figures.used else "no marker used",
            f"worst {figures.worst} {figures.worst_mm:.0f} mm" if figures.used else "",
            f"{left} not used" if left else "",
        ]

    def _column_places(self) -> list[float]:
        """Where each column starts, so that no number moves another."""
        samples = [self._running(p) for p in np.linspace(0, len(self.plan) - 1, 50).astype(int)]
        letters, x = self.setting.letters, self.setting.margin
        places = []
        for column in zip(*samples, strict=True):
            places.append(x)
            x += max(text_width(text, letters) for text in column) + COLUMN_GAP * letters
        return places

    def _strip_box(self) -> tuple[float, float, float, float]:
        """Left, top, right and foot of the error's course, pixels."""
        letters, margin = self.setting.letters, self.setting.margin
        width, height = self.setting.size
        foot = height - self.setting.footer + 0.4 * letters
        label = text_width("RMS error 000 mm", NOTE * letters) + letters
        return margin + label, foot - STRIP * letters, width - margin, foot

    def _across(self, picture: int) -> float:
        left, _, right, _ = self._strip_box()
        return left + (right - left) * picture / max(len(self.plan) - 1, 1)

    def _down(self, value: float) -> float:
        _, top, _, foot = self._strip_box()
        return foot - (foot - top) * float(value) / self._top()

    def _top(self) -> float:
        """The top of the course, mm."""
        known = self._rms[np.isfinite(self._rms)]
        largest = float(known.max()) if len(known) else 1.0
        step = 10.0 ** np.floor(np.log10(max(largest, 0.1)))
        return float(step * np.ceil(largest / step))

    def _draw_overlay(self) -> Image.Image:
        """Everything that stays, on a clear ground."""
        size, theme = self.setting.size, self.look.theme
        overlay = Image.new("RGBA", size, (*theme.ground, 0))
        self.setting.write(overlay, calm=False)
        overlay = _calmed(overlay, self.setting, theme.ground, STRIP * self.setting.letters)
        curve = self._draw_course()
        overlay.alpha_composite(curve)
        return overlay

    def _draw_course(self) -> Image.Image:
        size, theme, letters = self.setting.size, self.look.theme, self.setting.letters
        left, top, right, foot = (SMOOTH * side for side in self._strip_box())
        large = Image.new("RGBA", (SMOOTH * size[0], SMOOTH * size[1]), (*theme.measured, 0))
        draw = ImageDraw.Draw(large)
        rule = (*theme.soft_ink, 110)
        for y in (top, foot):
            draw.line((left, y, right, y), fill=rule, width=SMOOTH)
        places = [(SMOOTH * self._across(p), v) for p, v in enumerate(self._rms)]
        run: list[tuple[float, float]] = []
        for x, value in [*places, (0.0, np.nan)]:
            if np.isfinite(value):
                run.append((x, SMOOTH * self._down(float(value))))
                continue
            if len(run) > 1:
                draw.line(
                    run, fill=(*theme.measured, 255), width=round(0.36 * letters), joint="curve"
                )
            run = []
        course = large.convert("RGBa").reduce(SMOOTH).convert("RGBA")
        pen = ImageDraw.Draw(course)
        margin, pixels = self.setting.margin, NOTE * letters
        left, top, _, foot = self._strip_box()
        middle = 0.5 * (top + foot)
        write(pen, (margin, middle), "RMS error", pixels, colour=theme.soft_ink, anchor="lm")
        for y, text in ((top, f"{self._top():g} mm"), (foot, "0")):
            at = (left - 0.5 * letters, y)
            write(pen, at, text, pixels, colour=theme.soft_ink, anchor="rm")
        return course


def film_setting(
    motion: FittedMotion, rows: Sequence[int], look: Look, forces: Sequence[Forces] | None
) -> Setting:
    """The words that stay, set for the film's size."""
    words = film_words(motion, rows, look, forces)
    return set_words(words, look.size, letters=look.letters, theme=look.theme)


def film_room(setting: Setting) -> Room:
    """What words and the error's course leave for the figure."""
    room = setting.room()
    return Room(
        room.left, room.right, room.top, room.bottom - STRIP * setting.letters / setting.size[1]
    )


def _calmed(
    overlay: Image.Image, setting: Setting, ground: tuple[int, int, int], strip: float
) -> Image.Image:
    """The overlay on a veil of the ground's colour, growing towards the foot."""
    width, height = setting.size
    heights = np.arange(height, dtype=np.float64)
    start = height - setting.footer - strip - 0.6 * setting.letters
    ramp = np.clip((heights - start) / (3.0 * setting.letters), 0.0, 1.0)
    veil = np.empty((height, width, 4), dtype=np.uint8)
    veil[..., :3] = ground
    veil[..., 3] = np.round(225.0 * ramp * ramp * (3.0 - 2.0 * ramp))[:, None]
    under = Image.fromarray(veil)
    under.alpha_composite(overlay)
    return under
