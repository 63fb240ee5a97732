"""The living parts of a trial's page: where the script puts the player, the curves, the map and the clock.

Ids, `data-` attributes and classes here are what `page/source/main.js` looks for.
"""

from __future__ import annotations

from condyle.viz.floor import NARROW, WIDE
from condyle.viz.page_html import Markup, element
from condyle.viz.shown_trial import ShownTrial

KEYS = "keys: space, ← →, shift ← →, n for the next place, + −"
"""Beside the clock."""


def player_section(*, any_still: bool, every: int) -> Markup:
    """The player beside the curves of one joint."""
    thinned = (
        element(
            "p",
            f"A long trial: one frame in {every} is shown here; findings and tables know all.",
            class_="hint",
        )
        if every > 1
        else Markup("")
    )
    figure = "the pictures below show it standing still" if any_still else "the curves still work"
    instead = element(
        "p",
        f"This browser does not draw in three dimensions (WebGL 2); {figure}.",
        class_="instead",
    )
    left = element(
        "div",
        element(
            "div",
            instead,
            id="player",
            role="img",
            aria_label="The fitted skeleton among the measured markers, at the time of the clock",
        ),
        element("div", _views(), _lengthen(), class_="bar webgl"),
        element("div", *_layers(), class_="bar webgl"),
        element(
            "p",
            "Drag to turn, two fingers or the wheel to come nearer. Floor lines are "
            f"{NARROW:g} m and {WIDE:g} m apart. Measured markers stand at the end of the "
            "lengthened error.",
            class_="hint webgl",
        ),
    )
    right = element(
        "div",
        element("div", id="groups", role="group", aria_label="Joint"),
        element("div", id="plots", class_="plots", tabindex="0", aria_label="Curves"),
    )
    return element(
        "section",
        element("h2", "Skeleton and coordinates"),
        element(
            "p",
            "Bands hold 95 % of the error that the fit knows of (sd times 1.96). Dotted: a limit of the model's "
            "range; a thick foot: at it. Grey dashes: nothing determined it. Click into a curve to go there.",
            class_="hint",
        ),
        thinned,
        element("p", id="broken"),
        Markup(
            "<noscript><p>Scripts are off: words, tables and pictures stand below.</p></noscript>"
        ),
        element("div", left, right, class_="together"),
        id="show",
    )


def _views() -> Markup:
    names = ("oblique", "front", "right", "back", "left", "top")
    return element(
        "span",
        *(element("button", name, type="button", data_view=name) for name in names),
        class_="views",
        role="group",
        aria_label="View from",
    )


def _lengthen() -> Markup:
    options = Markup(
        '<option value="1">as they are</option><option value="3" selected>3 times</option>'
        '<option value="10">10 times</option>'
    )
    return element("label", "errors drawn ", element("select", options, id="lengthen"))


def _layers() -> list[Markup]:
    layers = (
        ("bones", "bones", "", True),
        ("glass", "see-through", "", False),
        ("sticks", "skeleton lines", "", False),
        ("measured", "measured", "measured", True),
        ("fitted", "on the skeleton", "fitted", True),
        ("residuals", "error", "residual", True),
    )
    boxes = [
        element(
            "label",
            Markup(f'<input type="checkbox" data-layer="{layer}"{" checked" if on else ""}>'),
            *([element("span", class_=f"swatch {swatch}")] if swatch else []),
            said,
        )
        for layer, said, swatch, on in layers
    ]
    follow = element("label", Markup('<input type="checkbox" id="follow" checked>'), "follow")
    left_out = element(
        "span", element("span", class_="swatch left-out"), "left out of the fit", class_="key"
    )
    return [*boxes, follow, left_out]


def error_section() -> Markup:
    """The error map, and the picked markers over time."""
    ramp = element("span", *(element("span", class_=f"e{i}") for i in range(5)), class_="ramp")
    keys = [
        element("span", "0", ramp, "40 mm and more", class_="key"),
        element("span", element("span", class_="swatch square left-out"), "left out", class_="key"),
        element("span", element("span", class_="swatch gap"), "not measured", class_="key"),
    ]
    order = element(
        "label",
        "order ",
        element(
            "select",
            Markup(
                '<option value="worst">largest error first</option><option value="model">the model\'s</option>'
            ),
            id="error-order",
        ),
    )
    return element(
        "section",
        element("h2", "Error of every marker over time"),
        element(
            "p",
            "Distance from a measured marker to its place on the fitted skeleton. Two markers that light up together, "
            "for the same while, have most likely been exchanged. Click to go there.",
            class_="hint",
        ),
        element("div", *keys, order, class_="bar"),
        element(
            "div",
            element(
                "canvas",
                id="error-map",
                role="img",
                aria_label="Error map; the table of markers below holds its numbers",
            ),
        ),
        element("p", id="error-told", aria_live="polite"),
        element("figcaption", id="marker-names"),
        element("div", id="marker-line"),
        element(
            "p",
            "Millimetres over seconds; dotted: the 40 mm above which a marker needs a look.",
            class_="hint",
        ),
        id="errors",
    )


def sides_section(trial: ShownTrial) -> Markup:
    """Left over right, where both sides have a number."""
    if not trial.pairs():
        return Markup("")
    return element(
        "section",
        element("h2", "Left over right"),
        element("p", "Right solid, left dashed, each with its 95 % band.", class_="hint"),
        element("div", id="side-plots", class_="plots"),
        id="sides",
    )


def transport() -> Markup:
    """The clock: play, slider, and what is said of the present frame."""
    speeds = Markup(
        '<option value="1">real time</option><option value="0.5">½ speed</option>'
        '<option value="0.25">¼ speed</option><option value="0.1">⅒ speed</option>'
    )
    now = [element("span", id=f"now-{name}") for name in ("time", "frame", "rms", "worst")]
    return element(
        "div",
        element(
            "div",
            element("button", "Play", type="button", id="play"),
            element("select", speeds, id="speed", aria_label="Speed"),
            element("div", *now, id="now"),
            element(
                "button",
                "+",
                type="button",
                id="nearer",
                aria_label="Show a shorter stretch of time",
            ),
            element(
                "button", "−", type="button", id="wider", aria_label="Show a longer stretch of time"
            ),
            element("button", "whole trial", type="button", id="whole"),
            element("span", KEYS, class_="hint wide push"),
            class_="line",
        ),
        element("div", id="marks", aria_hidden="true"),
        Markup(
            '<input type="range" id="slider" min="0" max="0" value="0" step="1" aria-label="Time">'
        ),
        id="transport",
        role="group",
        aria_label="Clock",
    )
