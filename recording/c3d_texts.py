"""Text parameters of a C3D file: decoded, trimmed, and followed through their continuations."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


def texts(group: Mapping[str, Any], name: str) -> list[str]:
    """A text parameter and its continuations (LABELS, LABELS2, ...), trimmed; [] where absent."""
    found: list[str] = []
    key, number = name, 1
    while key in group:
        values = group[key]["value"]
        found += [plain(v) for v in values if isinstance(v, str)]
        number += 1
        key = f"{name}{number}"
    return found


def plain(text: str) -> str:
    """Text without padding; bytes that are no UTF-8 are read as Latin-1, the older custom."""
    raw = text.encode("utf-8", "surrogateescape")
    try:
        decoded = raw.decode("utf-8")
    except UnicodeDecodeError:
        decoded = raw.decode("latin-1")
    return "".join(c for c in decoded.replace("\0", " ") if c.isprintable()).strip()
