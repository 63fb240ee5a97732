"""A defect of ours: the traceback goes into a log, the user gets one honest line."""

from __future__ import annotations

import sys
import tempfile
import traceback

from condyle.provenance import versions


def log_fault(fault: BaseException) -> str:
    """Write the traceback to a file of its own and give the line to show."""
    problem = (
        f"condyle failed: {type(fault).__name__}. This is a defect of ours, not of your files."
    )
    try:
        with tempfile.NamedTemporaryFile(
            "w", prefix="condyle-", suffix=".log", delete=False, encoding="utf-8"
        ) as log:
            log.write(f"{versions()}\n{' '.join(sys.argv)}\n")
            traceback.print_exception(fault, file=log)
    except OSError:
        return f"{problem} No log could be written."
    return f"{problem} Please report it with {log.name}."
