"""A result's table as a Parquet file, written by the embedded engine; the same rows give the same bytes."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from cohortflow.history.engine import opened, quoted


def write_parquet(frame: pd.DataFrame, path: str | Path) -> None:
    """Columns as they are, text unchanged (nothing in such a file can run), missing values missing.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     file = Path(folder) / "t.parquet"
    ...     write_parquet(pd.DataFrame({"state": ["=b"], "share": [0.25]}), file)
    ...     with opened() as engine:
    ...         engine.rows(f"SELECT * FROM {quoted(str(file))}")
    [('=b', 0.25)]
    """
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    text = {name: "string" for name in frame.columns if frame[name].dtype == object}
    with opened(threads=1) as engine:
        engine.register("result", frame.astype(text))
        engine.run(f"COPY (SELECT * FROM result) TO {quoted(str(target))} (FORMAT parquet, COMPRESSION zstd)")
        engine.connection.unregister("result")
