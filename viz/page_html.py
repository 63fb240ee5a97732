"""A page as text: parts put together, every text from a file escaped, nothing fetched from anywhere.

Decided here: what a page may do. Its security policy allows the one script and the one style that it
carries, by their hashes, and pictures that stand in it; whatever a file's text might smuggle in does not run.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from html import escape
from pathlib import Path

FOLDER = Path(__file__).parent / "page"

DATA_TYPE = "text/plain"
"""Of a script element that is not run: it holds base64."""


@dataclass(frozen=True, slots=True)
class Markup:
    """Text that is markup already; anything else is escaped."""

    text: str


Content = str | int | float | Markup


def html(content: Content) -> str:
    """Markup as it is, all else escaped.

    Examples
    --------
    >>> html("<b> & 'c'")
    '&lt;b&gt; &amp; &#x27;c&#x27;'
    """
    return content.text if isinstance(content, Markup) else escape(str(content))


def element(tag: str, *contents: Content, **attributes: str) -> Markup:
    """An element with its contents; `class_` stands for class, and `_` within a name for `-`.

    Examples
    --------
    >>> element("p", "a < b", class_="hint").text
    '<p class="hint">a &lt; b</p>'
    """
    said = "".join(
        f' {name.rstrip("_").replace("_", "-")}="{escape(value)}"'
        for name, value in attributes.items()
    )
    return Markup(f"<{tag}{said}>{''.join(html(c) for c in contents)}</{tag}>")


def joined(parts: Iterable[Markup]) -> Markup:
    """Parts one after another, a line each."""
    return Markup("\n".join(part.text for part in parts))


def table(heads: Sequence[str], rows: Iterable[Sequence[Content | tuple[str, Content]]]) -> Markup:
    """A table that scrolls by itself; a cell may be (class, content)."""
    head = element("tr", *(element("th", name, scope="col") for name in heads))
    body = joined(element("tr", *(_cell(cell) for cell in row)) for row in rows)
    whole = element("table", element("thead", head), element("tbody", body))
    return element("div", whole, class_="table", tabindex="0")


def _cell(cell: Content | tuple[str, Content]) -> Markup:
    if isinstance(cell, tuple):
        return element("td", cell[1], class_=cell[0])
    return element("td", cell)


def terms(pairs: Mapping[str, Content]) -> Markup:
    """A list of names and what they are."""
    return element(
        "dl", *(Markup(element("dt", k).text + element("dd", v).text) for k, v in pairs.items())
    )


def picture(png: bytes, *, alt: str, size: tuple[int, int]) -> Markup:
    """A PNG that stands in the page."""
    text = base64.b64encode(png).decode()
    return Markup(
        f'<img src="data:image/png;base64,{text}" alt="{escape(alt)}" width="{size[0]}" '
        f'height="{size[1]}">'
    )


@cache
def shipped(name: str) -> str:
    """A file that was built for the page and ships with the package."""
    return (FOLDER / name).read_text(encoding="utf-8")


def whole_page(
    title: str, body: Markup, *, data: Mapping[str, tuple[str, str]] | None = None
) -> str:
    """A page that needs nothing but itself.

    Parameters
    ----------
    data : id -> (type, text), optional
        What the script reads; with it the script travels too. The text must be safe inside a script
        element: base64, or JSON made by `script_json`.
    """
    style = shipped("page.css")
    script = shipped("page.js") if data else ""
    held = "\n".join(
        f'<script id="{name}" type="{kind}">{text}</script>'
        for name, (kind, text) in (data or {}).items()
    )
    run = f"<script>{script}</script>" if script else ""
    return (
        "<!doctype html>\n"
        '<html lang="en"><head><meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{policy(style, script)}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark"><meta name="referrer" content="no-referrer">\n'
        f"<title>{escape(title)}</title>\n"
        f"<style>{style}</style></head>\n"
        f"<body>\n{body.text}\n{held}\n{run}\n</body></html>\n"
    )


def policy(style: str, script: str) -> str:
    """What the page may do: run its own script, use its own style, show pictures that stand in it."""
    parts = ["default-src 'none'", "img-src data:", f"style-src {_hash(style)}"]
    if script:
        parts.append(f"script-src {_hash(script)}")
    return "; ".join([*parts, "base-uri 'none'", "form-action 'none'"])


def _hash(text: str) -> str:
    return f"'sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}'"
