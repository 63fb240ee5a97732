"""The page of a study: its trials side by side, those that need a look named first."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from condyle.solver.fit_report import CAUTION
from condyle.viz.page_findings import page_findings
from condyle.viz.page_html import Content, Markup, element, joined, table, whole_page
from condyle.viz.shown_trial import ShownTrial

WIDTH, HEIGHT, POINTS = 180, 30, 180
"""Of a small curve, and how many points it has at most."""

FULL = 0.03
"""m; the top of every small curve, so that trials compare."""


def study_page(name: str, trials: Sequence[tuple[ShownTrial, str]]) -> str:
    """The index of a study.

    Parameters
    ----------
    trials : (trial, the path of its page from here)
    """
    rows: list[tuple[int, tuple[Content | tuple[str, Content], ...]]] = []
    for trial, page in trials:
        looks = [f for f in page_findings(trial) if f.level == "look"]
        said = looks[0].what if looks else "nothing needs a look"
        if len(looks) > 1:
            said = f"{said} And {len(looks) - 1} more."
        report = trial.report
        rows.append(
            (
                len(looks),
                (
                    element("a", trial.name, href=page),
                    str(len(trial.motion.time)),
                    f"{trial.motion.time[-1] - trial.motion.time[0]:.2f} s",
                    _millimetres(report.get("rms_error")),
                    _millimetres(report.get("largest_error")),
                    _small_curve(trial),
                    (f"words {'look' if looks else 'good'}", said),
                ),
            )
        )
    rows.sort(key=lambda row: -row[0])
    count = sum(1 for looks, _ in rows if looks)
    needs = "needs" if count == 1 else "need"
    said = f"{count} of {len(rows)} trials {needs} a look." if count else "No trial needs a look."
    heads = ["trial", "frames", "duration", "RMS", "largest", "RMS over time", "what needs a look"]
    body = joined(
        [
            element(
                "header",
                element("h1", name),
                element("p", f"{len(rows)} trials. {said}", class_="sub"),
                element("p", CAUTION, class_="caution"),
            ),
            element(
                "main",
                element(
                    "section",
                    table(heads, [cells for _, cells in rows]),
                    element(
                        "p", f"Small curves reach from 0 to {1000 * FULL:.0f} mm.", class_="hint"
                    ),
                ),
            ),
        ]
    )
    return whole_page(f"{name} · how well its trials fit", body)


def _millimetres(metres: float | None) -> str:
    return "" if metres is None else f"{1000 * metres:.1f} mm"


def _small_curve(trial: ShownTrial) -> Markup:
    """RMS error over time; the largest of the frames that share a point, so that nothing short is lost."""
    rms = np.nan_to_num(trial.motion.rms_of_frames())
    parts = np.array_split(rms, min(POINTS, len(rms)))
    tops = [min(float(part.max()) / FULL, 1.0) for part in parts]
    x = np.linspace(0, WIDTH, len(tops))
    points = " ".join(
        f"{a:.1f},{HEIGHT - 1 - (HEIGHT - 2) * top:.1f}" for a, top in zip(x, tops, strict=True)
    )
    return Markup(
        f'<svg class="sparkline" viewBox="0 0 {WIDTH} {HEIGHT}" preserveAspectRatio="none" '
        f'role="img" aria-label="RMS error over time"><polyline points="{points}"/></svg>'
    )
