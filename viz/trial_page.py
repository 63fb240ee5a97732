"""One trial's page: findings in words, then the player and the curves, then figures, then where it comes from.

The order is the reader's: what needs a look comes before what is pretty. Everything that is words,
tables or a still stands in the page itself and needs no script.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from condyle.solver.fit_report import CAUTION
from condyle.viz.page_data import page_data
from condyle.viz.page_findings import PageFinding, page_findings
from condyle.viz.page_html import (
    DATA_TYPE,
    Content,
    Markup,
    element,
    joined,
    picture,
    terms,
    whole_page,
)
from condyle.viz.page_player import error_section, player_section, sides_section, transport
from condyle.viz.page_tables import marker_errors, ranges, segment_errors
from condyle.viz.shown_trial import ShownTrial


@dataclass(frozen=True, slots=True)
class Still:
    """A picture that stands in the page.

    Attributes
    ----------
    png : bytes
    alt, caption : str
        What it shows, for those who do not see it; what to read off it.
    size : (width, height) pixels
    """

    png: bytes
    alt: str
    caption: str
    size: tuple[int, int]


def trial_page(
    trial: ShownTrial,
    *,
    stills: Sequence[Still] = (),
    origin: Mapping[str, str] | None = None,
    index: str | None = None,
) -> str:
    """The page of a solved trial, one self-contained HTML file.

    Parameters
    ----------
    stills : pictures drawn elsewhere
    origin : what else is said about where it comes from, such as the command
    index : the page of the whole study, if there is one, as a relative path
    """
    findings = page_findings(trial)
    data = page_data(trial, findings)
    body = joined(
        [
            _header(trial, findings, index),
            Markup("<main>"),
            _findings(trial, findings),
            player_section(any_still=bool(stills), every=data.every),
            error_section(),
            sides_section(trial),
            _figures(trial, stills),
            _provenance(trial, origin or {}),
            transport(),
            Markup("</main>"),
        ]
    )
    return whole_page(
        f"{trial.name} · how well it fits",
        body,
        data={
            "description": ("application/json", data.description),
            "numbers": (DATA_TYPE, data.numbers),
        },
    )


def summary(trial: ShownTrial) -> str:
    """The trial in one line."""
    motion, report = trial.motion, trial.report
    seconds = float(motion.time[-1] - motion.time[0])
    model = report.get("subject", {}).get("name", "")
    rms, largest = report.get("rms_error"), report.get("largest_error")
    parts = [model, f"{len(motion.time)} frames, {seconds:.2f} s"]
    if report.get("rate"):
        parts.append(f"{report['rate']:g} frames a second")
    if rms is not None and largest is not None:
        error = np.where(motion.used, np.nan_to_num(motion.error), 0.0)
        row, marker = np.unravel_index(int(error.argmax()), error.shape)
        parts.append(f"RMS error {1000 * rms:.1f} mm")
        parts.append(
            f"largest {1000 * largest:.0f} mm ({motion.marker_names[marker]} at "
            f"{motion.time[row]:.2f} s)"
        )
    return " · ".join(filter(None, parts))


def _header(trial: ShownTrial, findings: Sequence[PageFinding], index: str | None) -> Markup:
    back = [element("p", element("a", "All trials of this study", href=index))] if index else []
    return element(
        "header",
        *back,
        element("h1", trial.name),
        element("p", summary(trial), class_="sub"),
        element("p", CAUTION, class_="caution"),
    )


def _findings(trial: ShownTrial, findings: Sequence[PageFinding]) -> Markup:
    numbered = list(enumerate(findings))
    grave = [_finding(i, f, trial) for i, f in numbered if f.level != "note"]
    notes = [_finding(i, f, trial) for i, f in numbered if f.level == "note"]
    count = sum(f.level == "look" for f in findings)
    heads = {0: "What needs a look: nothing", 1: "What needs a look: one thing"}
    parts = [
        element("h2", heads.get(count, f"What needs a look: {count} things")),
        element("ul", *grave, class_="findings"),
    ]
    if notes:
        counted = "One thing" if len(notes) == 1 else f"{len(notes)} things"
        parts.append(
            element(
                "details",
                element("summary", f"{counted} worth knowing"),
                element("ul", *notes, class_="findings"),
            )
        )
    return element("section", *parts, id="findings")


def _finding(index: int, finding: PageFinding, trial: ShownTrial) -> Markup:
    tags = {"look": "Needs a look: ", "good": "", "note": ""}
    parts = [
        element(
            "p", element("span", tags[finding.level], class_="tag"), finding.what, class_="what"
        )
    ]
    if finding.do:
        parts.append(element("p", finding.do, class_="do"))
    if finding.places:
        buttons = [
            element(
                "button",
                f"Show {trial.motion.time[place.worst]:.2f} s",
                type="button",
                data_finding=str(index),
                data_place=str(number),
            )
            for number, place in enumerate(finding.places)
        ]
        more: list[Content] = [f"and {finding.more} more"] if finding.more else []
        parts.append(element("p", *buttons, *more, class_="where"))
    return element("li", *parts, class_=finding.level)


def _figures(trial: ShownTrial, stills: Sequence[Still]) -> Markup:
    pictures = [
        element("figure", picture(s.png, alt=s.alt, size=s.size), element("figcaption", s.caption))
        for s in stills
    ]
    parts = [
        *([element("div", *pictures, class_="stills")] if pictures else []),
        element("div", element("h3", "Residual by segment"), segment_errors(trial.report)),
        element("div", element("h3", "Residual by marker"), marker_errors(trial)),
        element("div", element("h3", "Coordinates and angles"), ranges(trial.columns)),
    ]
    return element(
        "section",
        element("h2", "Figures of the whole trial"),
        element("div", *parts, class_="columns"),
        id="figures",
    )


def _provenance(trial: ShownTrial, origin: Mapping[str, str]) -> Markup:
    report = trial.report
    subject, recording = report.get("subject", {}), report.get("trial", {})
    up, smoothing = report.get("up", {}), report.get("smoothing")
    versions = report.get("versions", {})
    said: dict[str, Content] = {
        "recording": _file(recording),
        "subject": _file(subject),
        "up axis": f"{up.get('axis', '')} ({up.get('how', '')})",
        "estimate": "the trial as a whole" if smoothing else "each frame by itself",
        "sd of calibration": str(report.get("uncertainty", {}).get("calibration", "")),
        "remarks": "; ".join(map(str, recording.get("remarks", []))),
        "versions": ", ".join(f"{name} {number}" for name, number in versions.items()),
    }
    said = {name: content for name, content in (said | dict(origin)).items() if content}
    return element(
        "section",
        element("h2", "Where this comes from"),
        terms(said),
        element("p", CAUTION, class_="caution"),
        id="provenance",
    )


def _file(said: Mapping[str, str | None]) -> Content:
    name = str(said.get("file", ""))
    if not said.get("sha256"):
        return name
    return Markup(
        element("span", f"{name}, SHA-256 ").text + element("code", str(said["sha256"])).text
    )
