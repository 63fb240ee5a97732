"""The words of a picture: how large, where, and how much room they leave for the figure.

Decided here: every line of words fits the width, by breaking at its natural joints before becoming smaller,
so that a picture of one printed column (85 mm) is as readable as a wide one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from PIL import Image

from condyle.viz.legend import GAP, Entry, calm_foot, draw_legend, entry_width, write_within
from condyle.viz.palette import fit_text, text_width
from condyle.viz.theme import LIGHT, Theme
from condyle.viz.viewpoint import Room

DESIGN_WIDTH = 1280.0
"""Pixels; the width at which letters have their full size."""

BODY = 16.5
"""Pixels of a line's letters at the design width."""

SMALLEST_UNIT = 0.62
"""Letters are not scaled down further than this, or nobody could read them."""

TITLE, NOTE = 1.52, 0.82
"""Of the body's letters."""

TITLE_LEAST = 0.85
"""Of its size: rather than smaller, a title is short."""

MARGIN_LETTERS, MARGIN_SHARE = 2.2, 0.028
"""The margin round all words: in body letters and as a share of the width, whichever is less."""

TITLE_DOWN, FIRST_DOWN, HEADER_REST = 1.1, 2.9, 1.7
"""In body letters below the margin: the title's baseline, the first line's; then what stays free below the last."""

LEADING = 1.5
NOTE_UP, LEGEND_UP, FOOTER_REST = 0.8, 1.75, 3.2
"""The last note's baseline above the foot in margins; then in body letters the legend's above the first note, and
what stays free above the legend."""

MOST_WORDS = 0.42
"""Of the picture's height that words at the top, or at the foot, may take from the figure."""

JOINT = "  ·  "


@dataclass(frozen=True, slots=True)
class Words:
    """What a picture says.

    Attributes
    ----------
    title : str
    short : str
        The title where there is no room for the whole one; empty where there is only one.
    parts : the line of figures, broken between these where it must be
    entries : the legend
    notes : sentences below it
    """

    title: str
    short: str = ""
    parts: Sequence[str] = ()
    entries: Sequence[Entry] = ()
    notes: Sequence[str] = ()


@dataclass(frozen=True, slots=True)
class Setting:
    """Words set in lines, for one size of picture.

    Attributes
    ----------
    letters : float
        Pixels of the body.
    """

    size: tuple[int, int]
    letters: float
    title: str
    lines: list[str]
    rows: list[list[Entry]]
    notes: list[str]
    theme: Theme = field(default=LIGHT)

    @property
    def margin(self) -> float:
        """Pixels."""
        return margin_of(self.size[0], self.letters)

    @property
    def first_line(self) -> float:
        """Pixels from the top to the baseline of the first line below the title."""
        return self.margin + FIRST_DOWN * self.letters

    @property
    def header(self) -> float:
        """Pixels that words take at the top."""
        extra = LEADING * (len(self.lines) - 1) if self.lines else TITLE_DOWN - FIRST_DOWN
        return self.margin + self.letters * (FIRST_DOWN + extra + HEADER_REST)

    @property
    def footer(self) -> float:
        """Pixels that words take at the foot."""
        rows = LEADING * max(len(self.rows) - 1, 0)
        return self._legend_up + self.letters * (rows + FOOTER_REST)

    @property
    def _legend_up(self) -> float:
        """Pixels: the last row of the legend above the foot."""
        notes = LEADING * NOTE * (len(self.notes) - 1) if self.notes else -LEGEND_UP
        return NOTE_UP * self.margin + self.letters * (notes + LEGEND_UP)

    def room(self) -> Room:
        """The picture without the words; never less than its middle third."""
        height = self.size[1]
        return Room(
            0.05,
            0.95,
            min(self.header / height, MOST_WORDS),
            max(1.0 - self.footer / height, 1.0 - MOST_WORDS),
        )

    def write(self, image: Image.Image, *, calm: bool = True) -> None:
        """Write everything; `calm` fades the picture under the words at the foot."""
        letters, theme, left = self.letters, self.theme, self.margin
        width, foot = image.width - 2 * left, image.height
        at = (left, left + TITLE_DOWN * letters)
        write_within(
            image, at, self.title, TITLE * letters, width=width, colour=theme.ink, bold=True
        )
        for number, line in enumerate(self.lines):
            at = (left, self.first_line + LEADING * number * letters)
            write_within(image, at, line, letters, width=width, colour=theme.soft_ink)
        if calm:
            top = foot - self.footer
            calm_foot(image, from_height=top, until_height=top + 2.6 * letters, theme=theme)
        for number, row in enumerate(reversed(self.rows)):
            up = self._legend_up + LEADING * number * letters
            draw_legend(image, row, left=left, baseline=foot - up, pixels=letters, theme=theme)
        for number, note in enumerate(reversed(self.notes)):
            at = (left, foot - NOTE_UP * left - LEADING * NOTE * number * letters)
            write_within(image, at, note, NOTE * letters, width=width, colour=theme.soft_ink)


def margin_of(width: int, letters: float) -> float:
    """Pixels round all words."""
    return min(MARGIN_LETTERS * letters, MARGIN_SHARE * width)


def usual_letters(width: int) -> float:
    """Pixels of the body's letters in a picture so wide."""
    return BODY * max(width / DESIGN_WIDTH, SMALLEST_UNIT)


def set_words(
    words: Words, size: tuple[int, int], *, letters: float | None = None, theme: Theme = LIGHT
) -> Setting:
    """Break words into lines for a picture of that size; `letters` are the body's pixels."""
    letters = letters or usual_letters(size[0])
    width = size[0] - 2 * margin_of(size[0], letters)
    whole = text_width(words.title, TITLE_LEAST * TITLE * letters, bold=True) <= width
    wanted = words.title if whole or not words.short else words.short
    title, _ = fit_text(wanted, TITLE * letters, width, bold=True)
    return Setting(
        size,
        letters,
        title,
        broken(words.parts, JOINT, letters, width),
        rows_of(words.entries, letters, width),
        broken([sentence.strip() for sentence in words.notes], "  ", NOTE * letters, width),
        theme,
    )


def broken(parts: Sequence[str], joint: str, letters: float, width: float) -> list[str]:
    """The parts in as few lines as fit the width; a part too long for a line breaks between its words."""
    lines: list[str] = []
    for part in parts:
        if lines and text_width(f"{lines[-1]}{joint}{part}", letters) <= width:
            lines[-1] = f"{lines[-1]}{joint}{part}"
            continue
        for word_count, word in enumerate(part.split(" ")):
            fits = lines and text_width(f"{lines[-1]} {word}", letters) <= width
            if word_count and fits:
                lines[-1] = f"{lines[-1]} {word}"
            else:
                lines.append(word)
    return lines


def rows_of(entries: Sequence[Entry], letters: float, width: float) -> list[list[Entry]]:
    """The entries in as few rows as fit the width."""
    rows: list[list[Entry]] = []
    taken = 0.0
    for entry in entries:
        needed = entry_width(entry, letters)
        if rows and taken + GAP * letters + needed <= width:
            rows[-1].append(entry)
            taken += GAP * letters + needed
        else:
            rows.append([entry])
            taken = needed
    return rows
