"""The page in a real browser, offline, opened from the disk as a scientist would open it.

Needs Playwright and Debian's Chromium (`apt-get install chromium`); skips, saying so, where either is not
there. CONDYLE_CHROMIUM names a browser elsewhere.
"""

from __future__ import annotations

import os
import re
import shutil
import sys
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from condyle.solver.results import FittedMotion
from condyle.viz.shown_trial import SIGMAS, read_shown_trial
from condyle.viz.trial_page import Still, trial_page

sys.path.insert(0, str(Path(__file__).parent))
from page_trials import exchange, longer, write_trial

playwright = pytest.importorskip(
    "playwright.sync_api", reason="no Playwright: the page was not opened in a browser"
)
CHROMIUM = os.environ.get("CONDYLE_CHROMIUM") or shutil.which("chromium")
pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(
        CHROMIUM is None, reason="no chromium: the page was not opened in a browser"
    ),
]

SOFTWARE = ["--no-sandbox", "--disable-gpu", "--enable-unsafe-swiftshader"]
BARE = ["--no-sandbox", "--disable-gpu", "--disable-3d-apis"]
SECONDS = 3.0
"""What a page may take to open."""

PNG = bytes.fromhex(
    "89504e470d0a1a0a0000000d4948445200000001000000010806000000"
    "1f15c4890000000d49444154789c6360f8cf50000003010100c9fe92ef"
    "0000000049454e44ae426082"
)


@dataclass
class Opened:
    """A page, what it asked for beside itself, and what it complained of."""

    page: Any
    requests: list[str] = field(default_factory=list)
    faults: list[str] = field(default_factory=list)

    def text(self, selector: str) -> str:
        return str(self.page.locator(selector).first.inner_text())

    def go_to(self, row: int) -> None:
        """Move the slider as a hand would, and wait until the page says so."""
        self.page.locator("#slider").evaluate(
            "(s, row) => { s.value = row; s.dispatchEvent(new Event('input')); }", row
        )


@pytest.fixture(scope="module")
def browsers() -> Iterator[dict[str, Any]]:
    """A browser that draws in software, and one that does not draw in three dimensions at all."""
    with playwright.sync_playwright() as running:
        kinds = {"software": SOFTWARE, "bare": BARE}
        started = {
            kind: running.chromium.launch(executable_path=CHROMIUM, args=arguments)
            for kind, arguments in kinds.items()
        }
        yield started
        for browser in started.values():
            browser.close()


@pytest.fixture
def folder(leg: FittedMotion, tmp_path: Path) -> Path:
    motion = exchange(longer(leg, 3), "shin", "ankle", slice(40, 55))
    motion.measured[20:24, 0] = np.nan
    motion.used[20:24, 0] = False
    folder = write_trial(tmp_path / "swap", motion)
    still = Still(PNG, "a leg", "The worst frame", (1, 1))
    page = trial_page(read_shown_trial(folder), stills=[still])
    (folder / "report.html").write_text(page, encoding="utf-8")
    return folder


def opened(
    browsers: dict[str, Any], folder: Path, kind: str = "software", **context: Any
) -> Opened:
    found = Opened(browsers[kind].new_context(offline=True, **context).new_page())
    found.page.on("request", lambda request: found.requests.append(request.url))
    found.page.on("pageerror", lambda fault: found.faults.append(str(fault)))
    found.page.on(
        "console",
        lambda message: found.faults.append(message.text) if message.type == "error" else None,
    )
    found.page.goto((folder / "report.html").as_uri())
    found.page.wait_for_selector("body.alive", timeout=20_000)
    return found


def number(text: str) -> float:
    found = re.search(r"-?\d+(\.\d+)?", text)
    assert found, text
    return float(found[0])


def test_the_page_opens_quickly_asks_for_nothing_and_complains_of_nothing(
    browsers: dict[str, Any], folder: Path
) -> None:
    found = opened(browsers, folder)
    alive = found.page.evaluate("performance.now()")
    found.page.keyboard.press("Space")
    found.page.wait_for_timeout(300)
    assert found.requests == [(folder / "report.html").as_uri()]
    assert found.faults == []
    assert alive < 1000 * SECONDS
    found.page.context.close()


def test_numbers_on_the_page_are_those_of_the_files(browsers: dict[str, Any], folder: Path) -> None:
    found = opened(browsers, folder)
    found.page.locator("#groups button[value=all]").click()
    coordinates = pd.read_parquet(folder / "coordinates.parquet")
    markers = pd.read_parquet(folder / "markers.parquet")
    for row in (0, 47, 100):
        found.go_to(row)
        frame = coordinates.iloc[row]
        assert found.text("#now-time") == f"{frame['time']:.2f} s"
        assert found.text("#now-frame") == f"frame {int(frame['frame'])}"
        here = markers[(markers["frame"] == frame["frame"]) & markers["used"]]
        rms = 1000 * np.sqrt((here["error"] ** 2).mean())
        assert number(found.text("#now-rms")) == pytest.approx(rms, abs=0.06)
        worst = here.loc[here["error"].idxmax()]
        assert str(worst["marker"]) in found.text("#now-worst")
        shown = number(found.text("#now-worst").removeprefix(f"worst {worst['marker']} "))
        assert shown == pytest.approx(1000 * worst["error"], abs=0.06)
        for name in ("hip_flexion_right", "hip_flexion_left"):
            figure = found.page.locator("#plots figure", has_text=name)
            value, band = figure.locator(".value").inner_text().split("±")
            assert number(value) == pytest.approx(frame[name], abs=0.056)
            assert number(band) == pytest.approx(SIGMAS * frame[f"{name}.sd"], abs=0.06)
    found.page.context.close()


def test_the_page_begins_at_what_needs_a_look_and_names_it(
    browsers: dict[str, Any], folder: Path
) -> None:
    found = opened(browsers, folder)
    assert 2.0 <= number(found.text("#now-time")) <= 2.7
    assert "shin and ankle look exchanged" in found.text("#findings")
    assert found.page.locator("#marker-names").inner_text().split("\n")[1:] == ["shin", "ankle"]
    found.go_to(0)
    found.page.locator("#findings button").first.click()
    assert 2.0 <= number(found.text("#now-time")) <= 2.7
    found.page.context.close()


def test_keys_move_the_one_clock(browsers: dict[str, Any], folder: Path) -> None:
    found = opened(browsers, folder)
    found.go_to(10)
    for key, frame in (
        ("ArrowRight", 12), ("Shift+ArrowRight", 22), ("ArrowLeft", 21), ("Home", 1), ("End", 126),
    ):  # fmt: skip
        found.page.keyboard.press(key)
        assert found.text("#now-frame") == f"frame {frame}"
    found.page.keyboard.press("Home")
    found.page.keyboard.press("Space")
    found.page.wait_for_timeout(1000)
    assert number(found.text("#now-frame")) > 3
    found.page.context.close()


def test_the_error_map_is_dark_where_two_markers_are_exchanged(
    browsers: dict[str, Any], folder: Path
) -> None:
    found = opened(browsers, folder)
    box = found.page.locator("#error-map").bounding_box()
    canvas = found.page.locator("#error-map")
    gutter = min(max(110, 0.16 * box["width"]), 170)
    canvas.scroll_into_view_if_needed()
    across = (box["width"] - gutter - 8) / 126
    canvas.hover(position={"x": gutter + 45.5 * across, "y": 6 + 6})
    assert re.match(r"(shin|ankle) at 2\.25 s \(frame 46\): \d+", found.text("#error-told"))
    found.go_to(100)
    pixel = "(c, at) => [...c.getContext('2d').getImageData(at[0], at[1], 1, 1).data].slice(0, 3)"
    dark = canvas.evaluate(pixel, [int(gutter + 50.5 * across), 12])
    pale = canvas.evaluate(pixel, [int(gutter + 20.5 * across), 12])
    assert sum(dark) < sum(pale) - 150
    found.page.context.close()


def blue_pixels(found: Opened) -> int:
    """Of the player: those of measured markers, and of nothing else."""
    counted = found.page.locator("#player canvas").evaluate(
        """canvas => {
          const copy = document.createElement("canvas");
          [copy.width, copy.height] = [canvas.width, canvas.height];
          const pen = copy.getContext("2d");
          pen.drawImage(canvas, 0, 0);
          const { data } = pen.getImageData(0, 0, copy.width, copy.height);
          let blue = 0;
          for (let i = 0; i < data.length; i += 4)
            if (data[i + 3] > 200 && data[i + 2] > 90 && data[i] < 0.35 * data[i + 2]) blue++;
          return blue;
        }"""
    )
    return int(counted)


def test_measured_markers_are_drawn_and_can_be_hidden(
    browsers: dict[str, Any], folder: Path
) -> None:
    found = opened(browsers, folder)
    found.page.wait_for_timeout(500)
    with_markers = blue_pixels(found)
    found.page.locator("input[data-layer=measured]").uncheck()
    found.page.wait_for_timeout(500)
    assert with_markers > 10
    assert blue_pixels(found) == 0
    found.page.context.close()


def test_without_webgl_curves_and_the_still_remain(browsers: dict[str, Any], folder: Path) -> None:
    found = opened(browsers, folder, "bare")
    assert found.page.locator("body.no-webgl").count() == 1
    assert found.page.locator("#player img").count() == 1
    assert found.page.locator("#plots canvas").count() > 0
    found.go_to(5)
    assert found.text("#now-frame") == "frame 6"
    assert found.faults == []
    found.page.context.close()


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_nothing_sticks_out_on_a_phone(browsers: dict[str, Any], folder: Path, theme: str) -> None:
    found = opened(browsers, folder, viewport={"width": 360, "height": 780}, color_scheme=theme)
    assert found.page.evaluate("document.documentElement.scrollWidth") <= 360
    found.page.context.close()


def test_the_page_prints_with_every_curve(
    browsers: dict[str, Any], folder: Path, tmp_path: Path
) -> None:
    found = opened(browsers, folder)
    found.page.evaluate("dispatchEvent(new Event('beforeprint'))")
    assert found.page.locator("#plots figure canvas").count() == 4
    assert found.page.locator("#side-plots figure canvas").count() == 1
    found.page.pdf(path=tmp_path / "page.pdf")
    assert (tmp_path / "page.pdf").read_bytes().startswith(b"%PDF")
    assert found.faults == []
    found.page.context.close()


def test_a_script_from_a_file_does_not_run(
    browsers: dict[str, Any], leg: FittedMotion, tmp_path: Path
) -> None:
    nasty = "</script><script>document.title = 'taken'</script>"
    warning = {"what": nasty, "do": nasty, "needs_a_look": True}
    folder = write_trial(tmp_path / "nasty", leg, warnings=(warning,), name_of=lambda n: n + nasty)
    page = trial_page(read_shown_trial(folder), origin={"page": nasty})
    (folder / "report.html").write_text(page, encoding="utf-8")
    found = opened(browsers, folder)
    assert found.page.title() == "nasty · how well it fits"
    assert found.faults == []
    found.page.context.close()
