"""Which input and which versions a run was made from: enough to repeat it and to see that nothing changed."""

from __future__ import annotations

import hashlib
import importlib.metadata
import os
import platform
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from cohortflow.errors import InputError

LIBRARIES = ("numpy", "pandas", "scipy", "statsmodels", "matplotlib", "duckdb", "jinja2")
BLOCK = 1 << 20


def fingerprints(files: Iterable[Path], rows: Mapping[str, int]) -> list[dict[str, Any]]:
    """name, bytes, sha256 and rows of each file, sorted by name. No paths: a copy elsewhere is the same."""
    found = [
        {"name": path.name, "bytes": path.stat().st_size, "sha256": sha256(path), "rows": rows.get(path.name)}
        for path in files
    ]
    return sorted(found, key=lambda item: (item["name"], item["sha256"]))


def sha256(path: Path) -> str:
    """SHA-256 of a file's bytes; InputError when it cannot be read."""
    digest = hashlib.sha256()
    try:
        with path.open("rb") as handle:
            while block := handle.read(BLOCK):
                digest.update(block)
    except OSError as error:
        raise InputError(f'"{path}" cannot be read: {error.strerror}.') from None
    return digest.hexdigest()


def versions() -> dict[str, str]:
    """Versions of Python and of the libraries that figures or files depend on."""
    return {
        "python": platform.python_version(),
        **{name: importlib.metadata.version(name) for name in LIBRARIES},
    }


def made_at() -> str | None:
    """The time of SOURCE_DATE_EPOCH, if that is set; else None, so that a repeated run has the same bytes."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    return datetime.fromtimestamp(int(epoch), UTC).isoformat() if epoch.isdigit() else None
