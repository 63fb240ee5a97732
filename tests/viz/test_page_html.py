"""A page is whole in itself, runs nothing that a file smuggles in, and can be read."""

from __future__ import annotations

import hashlib
import re
import sys
from collections.abc import Callable
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from condyle.solver.fit_report import CAUTION
from condyle.solver.results import FittedMotion
from condyle.viz.page_data import page_data, script_json
from condyle.viz.page_findings import page_findings
from condyle.viz.page_html import FOLDER, element, html, shipped
from condyle.viz.shown_trial import ShownTrial, read_shown_trial
from condyle.viz.study_page import study_page
from condyle.viz.trial_page import Still, trial_page

sys.path.insert(0, str(Path(__file__).parent))
from page_trials import exchange, longer, write_trial

NASTY = "</script><script>alert(1)</script><img src=x onerror=alert(1)>"


class Reader(HTMLParser):
    """Elements, attributes and visible words of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.words = ""
        self.hidden = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self.hidden = tag if tag in ("script", "style") else self.hidden

    def handle_endtag(self, tag: str) -> None:
        self.hidden = "" if tag == self.hidden else self.hidden

    def handle_data(self, data: str) -> None:
        self.words += "" if self.hidden else data


@pytest.fixture
def trial(leg: FittedMotion, tmp_path: Path) -> ShownTrial:
    motion = exchange(longer(leg, 3), "shin", "ankle", slice(40, 55))
    return read_shown_trial(write_trial(tmp_path / "swap", motion))


def test_a_page_names_nothing_outside_itself(trial: ShownTrial) -> None:
    for tag, attributes in Reader(trial_page(trial)).elements:
        for name in ("src", "href", "srcset", "action", "data"):
            assert attributes.get(name) is None or str(attributes[name]).startswith("data:"), tag


def test_findings_come_before_pictures_and_provenance_comes_last(trial: ShownTrial) -> None:
    words = Reader(trial_page(trial)).words
    order = ["What needs a look", "Skeleton and coordinates", "Error of every marker", "Left over right",
             "Figures of the whole trial", "Where this comes from"]  # fmt: skip
    places = [words.index(heading) for heading in order]
    assert places == sorted(places)
    assert "shin and ankle look exchanged from 2.00 s to 2.70 s" in words
    assert CAUTION in words
    assert "cd" * 32 in words


def test_the_policy_allows_just_the_pages_own_script_and_style(trial: ShownTrial) -> None:
    elements = Reader(trial_page(trial)).elements
    policy = next(str(a["content"]) for _, a in elements if a.get("http-equiv"))
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy
    assert policy.count("'sha256-") == 2


def test_no_element_carries_a_style_or_a_handler_of_its_own(trial: ShownTrial) -> None:
    for _, attributes in Reader(trial_page(trial)).elements:
        assert not [name for name in attributes if name == "style" or name.startswith("on")]


def test_text_from_files_is_never_markup(leg: FittedMotion, tmp_path: Path) -> None:
    warning = {"what": NASTY, "do": NASTY, "needs_a_look": True}
    folder = write_trial(
        tmp_path / "nasty", leg, warnings=(warning,), name_of=lambda name: f"{name}{NASTY}"
    )
    trial = read_shown_trial(folder)
    for page in (trial_page(trial, origin={"page": NASTY}), study_page(NASTY, [(trial, "a.html")])):
        reader = Reader(page)
        assert "<script>alert(1)</script>" in reader.words
        assert not [tag for tag, attributes in reader.elements if attributes.get("onerror")]
        assert "<script>alert" not in page


def test_description_is_safe_inside_a_script_element() -> None:
    assert "<" not in script_json({"name": "</script><!--"})
    assert ">" not in script_json({"name": "-->"})


def test_the_script_holds_nothing_that_would_end_it_early() -> None:
    script = shipped("page.js").lower()
    assert "</script" not in script
    assert "<!--" not in script


def test_the_shipped_script_was_built_from_these_sources() -> None:
    digest = hashlib.sha256()
    endings = {".js", ".mjs", ".css", ".json"}
    for path in sorted((FOLDER / "source").iterdir()):
        if path.suffix in endings and path.name != "package-lock.json":
            digest.update(f"{path.name}\n".encode() + path.read_bytes())
    for name in ("page.js", "page.css"):
        assert f"sources {digest.hexdigest()}" in shipped(name).splitlines()[0], (
            f"{name} is older than viz/page/source: run `npm run build` there"
        )


def test_every_page_carries_the_licences_of_what_it_bundles(trial: ShownTrial) -> None:
    page = trial_page(trial)
    for owner in ("three.js authors", "Leon Sorokin"):
        assert owner in shipped("licences.txt")
        assert owner in page
    assert page.count("Permission is hereby granted, free of charge") == 2


def test_the_same_trial_gives_the_same_page(trial: ShownTrial) -> None:
    assert trial_page(trial) == trial_page(trial)


def test_a_thousand_frames_travel_small(
    trial: ShownTrial, leg: FittedMotion, tmp_path: Path
) -> None:
    """Four markers here; the size of a whole body is measured in the test of the browser."""
    many = read_shown_trial(write_trial(tmp_path / "many", longer(leg, 24)))
    assert len(page_data(many, page_findings(many)).numbers) < 150_000


def test_a_very_long_trial_is_thinned_and_says_so(
    leg: FittedMotion, change: Callable[..., Any], tmp_path: Path
) -> None:
    many = read_shown_trial(write_trial(tmp_path / "many", longer(leg, 300)))
    assert page_data(many, []).every == 3
    assert "every 3th frame" not in trial_page(many)
    assert "one frame in 3" in trial_page(many)


def test_a_still_stands_in_the_page_with_its_words(trial: ShownTrial) -> None:
    page = trial_page(trial, stills=[Still(b"\x89PNG", "a leg", "The worst frame", (4, 3))])
    image = next(a for tag, a in Reader(page).elements if tag == "img")
    assert str(image["src"]).startswith("data:image/png;base64,")
    assert image["alt"] == "a leg"
    assert "The worst frame" in Reader(page).words


def test_a_study_names_the_trial_that_needs_a_look_first(
    trial: ShownTrial, leg: FittedMotion, change: Callable[..., Any], tmp_path: Path
) -> None:
    calm = read_shown_trial(
        write_trial(tmp_path / "calm", change(leg, measured=leg.fitted + 0.001))
    )
    page = study_page("study", [(calm, "calm/report.html"), (trial, "swap/report.html")])
    links = [str(a["href"]) for tag, a in Reader(page).elements if tag == "a"]
    assert links == ["swap/report.html", "calm/report.html"]
    assert "1 of 2 trials needs a look" in Reader(page).words


def test_elements_escape_what_is_not_markup() -> None:
    assert html(element("p", "a<b", title='"')) == '<p title="&quot;">a&lt;b</p>'


# Contrast: WCAG 2.2, success criteria 1.4.3 (text, 4.5) and 1.4.11 (what is drawn, 3), by the
# relative luminance that it defines from sRGB (the W3C's definition, with 0.04045 as in IEC 61966-2-1).


def luminance(colour: str) -> float:
    parts = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def contrast(first: str, second: str) -> float:
    low, high = sorted([luminance(first), luminance(second)])
    return (high + 0.05) / (low + 0.05)


def themes() -> dict[str, dict[str, str]]:
    css = (FOLDER / "source" / "page.css").read_text(encoding="utf-8")
    light, dark = re.findall(r":root \{(.*?)\n *\}", css, flags=re.DOTALL)[:2]

    def colours(block: str) -> dict[str, str]:
        return dict(re.findall(r"--([\w-]+): (#[0-9a-f]{6});", block))

    return {"light": colours(light), "dark": colours(light) | colours(dark)}


def test_contrast_of_black_on_white_is_21() -> None:
    """The largest there is, by WCAG's definition."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize(
    ("text", "behind"),
    [("ink", "paper"), ("ink", "panel"), ("soft", "paper"), ("soft", "panel"), ("ink", "look-paper"),
     ("soft", "look-paper"), ("on-accent", "accent"), ("accent", "paper"), ("accent", "panel"),
     ("soft", "sky"), ("soft", "ground")],
)  # fmt: skip
def test_text_can_be_read(theme: str, text: str, behind: str) -> None:
    colours = themes()[theme]
    assert contrast(colours[text], colours[behind]) >= 4.5


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize(
    ("drawn", "behind"),
    [(name, "panel") for name in ("side-right", "side-left", "side-middle", "look", "measured", "edge",
                                  "good", "note", "ink")]
    + [("look", "look-paper"), ("error-4", "error-0"), ("error-3", "error-0"), ("error-4", "error-2")],
)  # fmt: skip
def test_what_is_drawn_can_be_seen(theme: str, drawn: str, behind: str) -> None:
    colours = themes()[theme]
    assert contrast(colours[drawn], colours[behind]) >= 3.0


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_a_larger_error_is_always_farther_from_a_small_one(theme: str) -> None:
    colours = themes()[theme]
    away = [contrast(colours[f"error-{i}"], colours["error-0"]) for i in range(5)]
    assert all(a < b for a, b in pairwise(away))
