"""The embedded engine: one private database for one reading, removed afterwards.

Nothing is looked up on a network: extensions are neither installed nor loaded. Time zone UTC, so that text
without an offset keeps its own digits. Insertion order is kept: rowid is the number of the record.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import duckdb
import numpy as np

MEMORY_MB = 1000  # for the engine; the sweep adds some hundred MB of its own
ON_DISK_FROM = 700_000_000  # bytes of input from which the tables live in a work file


class Engine:
    """A connection, its work folder, and the two ways of asking it."""

    def __init__(self, folder: Path, connection: duckdb.DuckDBPyConnection) -> None:
        self.folder, self.connection = folder, connection

    def run(self, sql: str, values: Sequence[Any] = ()) -> None:
        """Execute a statement."""
        self.connection.execute(sql, list(values))

    def rows(self, sql: str, values: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """All rows of a small answer."""
        return self.connection.execute(sql, list(values)).fetchall()

    def one(self, sql: str) -> Any:
        """The single value of an answer."""
        return self.rows(sql)[0][0]

    def arrays(self, sql: str) -> dict[str, np.ndarray]:
        """The columns of a large answer; missing numbers must be replaced in the statement."""
        return {k: np.asarray(v) for k, v in self.connection.execute(sql).fetchnumpy().items()}

    def register(self, name: str, frame: Any) -> None:
        """Let a frame be read under `name`."""
        self.connection.register(name, frame)

    def drop(self, *names: str) -> None:
        """Remove tables of this reading."""
        for name in names:
            self.run(f"DROP TABLE IF EXISTS {name}")


@contextmanager
def opened(
    *, input_bytes: int = 0, memory_mb: int | None = None, threads: int | None = None
) -> Iterator[Engine]:
    """An engine with a work folder; both are gone at the end. COHORTFLOW_WORK names another place for it."""
    folder = Path(tempfile.mkdtemp(prefix="cohortflow-", dir=os.environ.get("COHORTFLOW_WORK") or None))
    database = str(folder / "work.db") if input_bytes >= ON_DISK_FROM else ":memory:"
    connection = duckdb.connect(database)
    try:
        settings = {
            "memory_limit": f"'{memory_mb or MEMORY_MB}MB'",
            "temp_directory": quoted(str(folder / "spill")),
            "TimeZone": "'UTC'",
            "preserve_insertion_order": "true",
            "autoinstall_known_extensions": "false",
        }
        for name, value in settings.items():
            connection.execute(f"SET {name} = {value}")
        with suppress(duckdb.InvalidInputException):  # a notebook without widgets has no bar to switch off
            connection.execute("SET enable_progress_bar = false")
        if threads:
            connection.execute(f"SET threads = {int(threads)}")
        yield Engine(folder, connection)
    finally:
        connection.close()
        shutil.rmtree(folder, ignore_errors=True)


def quoted(text: str) -> str:
    """A SQL text literal.

    >>> quoted("it's")
    "'it''s'"
    """
    return "'" + text.replace("'", "''") + "'"


def texts(values: Sequence[str]) -> str:
    """A SQL list of text literals in brackets; `(NULL)` when empty, which matches nothing."""
    return "(" + (", ".join(quoted(v) for v in values) or "NULL") + ")"


def integers(values: Sequence[int]) -> str:
    """A SQL list of numbers in brackets; `(NULL)` when empty, which matches nothing."""
    return "(" + (", ".join(str(int(v)) for v in values) or "NULL") + ")"
