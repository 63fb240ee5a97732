"""What the command line shows: tables and findings on stdout, progress and faults on stderr."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import Any

import numpy as np
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table
from rich.text import Text

from condyle.solver.quality import Finding

PLAIN_STEP = 0.25
"""Where stderr is no terminal, one line is printed at each quarter of the work."""

PLAIN_WIDTH = 200
"""Characters a line may have where stdout is no terminal, so that no name is cut short."""


def out() -> Console:
    """The console of answers."""
    width = None if sys.stdout.isatty() else PLAIN_WIDTH
    return Console(highlight=False, soft_wrap=width is not None, width=width)


def err() -> Console:
    """The console of progress and faults."""
    return Console(stderr=True, highlight=False, soft_wrap=True)


def say(line: str) -> None:
    """One line of the answer, printed as it is."""
    out().print(Text(line))


def show_json(content: Mapping[str, Any]) -> None:
    """The answer for a machine."""
    print(json.dumps(_plain(content), indent=1, ensure_ascii=False))


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple | set):
        return [_plain(v) for v in value]
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, float | np.floating):
        return float(value) if np.isfinite(value) else None
    if isinstance(value, bool | int | str) or value is None:
        return value
    return str(value)


def show_table(title: str, columns: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """A plain table; columns after the first are set to the right."""
    table = Table(title=title, title_justify="left", box=None, pad_edge=False)
    for i, column in enumerate(columns):
        table.add_column(column, justify="left" if i == 0 else "right")
    for row in rows:
        table.add_row(*[Text(cell) for cell in row])
    out().print(table)


def show_findings(findings: Sequence[Finding]) -> None:
    """Findings in words: what needs a look on stderr, the rest beside the answer."""
    for finding in findings:
        line = f"{finding.what}; {finding.do}"
        if finding.needs_look:
            err().print(Text(f"needs a look: {line}", style="bold yellow"))
        else:
            out().print(Text(f"note: {line}"))


@contextmanager
def progress(description: str) -> Iterator[Callable[[str, float], None]]:
    """A bar with the time left on a terminal, plain lines elsewhere, always on stderr.

    Yields
    ------
    callable
        Takes a name and the share of that name's work done.
    """
    console = err()
    if not console.is_terminal:
        yield _plain_progress(console)
        return
    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.percentage:3.0f} %"),
        TimeRemainingColumn(),
        console=console,
        transient=True,
    )
    with bar:
        task = bar.add_task(description, total=1.0)

        def tell(name: str, share: float) -> None:
            bar.update(task, completed=share, description=f"{description} {name}")

        yield tell


def _plain_progress(console: Console) -> Callable[[str, float], None]:
    told: dict[str, float] = {}

    def tell(name: str, share: float) -> None:
        if share >= told.get(name, 0.0) + PLAIN_STEP or (share >= 1 and told.get(name, 0.0) < 1):
            told[name] = share
            console.print(Text(f"{name}: {100 * share:.0f} %"))

    return tell
