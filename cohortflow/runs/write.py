"""The files of a run folder. Text cells are neutralised in report/table.py, the one place for it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from cohortflow import __version__
from cohortflow.record import plain
from cohortflow.report.table import csv_text
from cohortflow.runs.findings import not_yet
from cohortflow.runs.fingerprint import made_at, versions
from cohortflow.runs.place import MARK, write_text

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run

FORMAT_VERSION = 1
VALUE_COLUMN = "value"


def run_folder(done: Run, folder: Path, *, keep_values: bool) -> None:
    """Write everything that the run holds into an empty folder."""
    for name, frame in done.tables.items():
        write_text(folder / "tables" / f"{name}.csv", csv_text(frame))
    rejected = done.rejected if keep_values else done.rejected.drop(columns=VALUE_COLUMN, errors="ignore")
    write_text(folder / "rejected.csv", csv_text(rejected))
    write_text(folder / MARK, record_text(done))


def record_text(done: Run) -> str:
    """run.json: enough to repeat the run and to see what it rests on."""
    return json.dumps(plain(record(done)), indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def record(done: Run) -> dict[str, Any]:
    """The run record: no paths, no times, so that a run repeated elsewhere has the same bytes."""
    study = done.study
    return {
        "kind": "run",
        "format_version": FORMAT_VERSION,
        "stage": done.stage,
        "by": done.by,
        "program": {"name": "cohortflow", "version": __version__},
        "libraries": versions(),
        "made_at": made_at(),
        "seed": study.seed,
        "study": study.to_dict(),
        "set_by": dict(study.origin_of),
        "definitions": study.digest(),
        "inputs": done.check.inputs,
        "accounting": done.tables["accounting"].to_dict(orient="records"),
        "findings": list(done.findings),
        "warnings": not_yet(study),
        "absent": dict(done.absent),
        "tables": {
            name: {"rows": len(frame), "columns": [str(c) for c in frame.columns]}
            for name, frame in done.tables.items()
        },
    }
