"""What `report` and `figures` say when they are done, for a person or as JSON."""

from __future__ import annotations

from condyle.answers import DONE
from condyle.reporting import Figures, Report
from condyle.screen import say, show_json
from condyle.solver.fit_report import CAUTION


def show_report(made: Report, *, as_json: bool) -> int:
    """The pages written, and which to open."""
    if as_json:
        show_json(
            {
                "pages": [str(page) for page in made.pages],
                "index": None if made.index is None else str(made.index),
                "notes": list(made.remarks),
            }
        )
        return DONE
    for remark in made.remarks:
        say(f"note: {remark}")
    for page in made.pages:
        say(str(page))
    say(to_open(made))
    return DONE


def to_open(made: Report) -> str:
    """The line that names the page to begin with."""
    return f"open {made.to_open} in a browser"


def show_figures(made: Figures, *, as_json: bool) -> int:
    """The figures written."""
    if as_json:
        show_json({"figures": [str(f) for f in made.files], "notes": list(made.remarks)})
        return DONE
    for remark in made.remarks:
        say(f"note: {remark}")
    for file in made.files:
        say(str(file))
    say(CAUTION)
    return DONE
