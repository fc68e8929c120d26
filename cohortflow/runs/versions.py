"""Which program and libraries a run was made with, and the one time stamp that may be written."""

from __future__ import annotations

import importlib.metadata
import os
import platform
from datetime import UTC, datetime

LIBRARIES = ("numpy", "pandas", "scipy", "statsmodels", "matplotlib", "duckdb", "jinja2")


def versions() -> dict[str, str]:
    """Versions of Python and of the libraries that figures or files depend on."""
    return {
        "python": platform.python_version(),
        **{name: importlib.metadata.version(name) for name in LIBRARIES},
    }


def made_at() -> str | None:
    """The time of SOURCE_DATE_EPOCH, if that is set; else None, so that a repeated run has the same bytes."""
    seconds = epoch()
    return None if seconds is None else datetime.fromtimestamp(seconds, UTC).isoformat()


def epoch() -> int | None:
    """SOURCE_DATE_EPOCH in seconds, if that is set to a whole number."""
    text = os.environ.get("SOURCE_DATE_EPOCH", "")
    return int(text) if text.isdigit() else None
