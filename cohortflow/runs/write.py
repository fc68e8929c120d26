"""The files of a run folder. Text cells are neutralised in report/table.py, the one place for it."""

from __future__ import annotations

import json
from collections.abc import Collection
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

from cohortflow import __version__
from cohortflow.history import save_tally
from cohortflow.history.export import write_parquet
from cohortflow.record import plain
from cohortflow.report.definitions import assumption_log
from cohortflow.report.table import csv_text
from cohortflow.runs.place import MARK, write_text
from cohortflow.runs.versions import epoch, made_at, versions

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run

FORMAT_VERSION = 1


def run_folder(done: Run, folder: Path, *, also: Collection[str] = ()) -> None:
    """Write everything that the run holds into an empty folder; `also`: workbook, parquet."""
    for name, frame in done.tables.items():
        write_text(folder / "tables" / f"{name}.csv", csv_text(frame))
    write_text(folder / "rejected.csv", csv_text(done.rejected))
    if done.tally is not None:
        save_tally(done.tally, folder / "tally")
    if done.stage == "run":
        write_report(done, folder)
    if "workbook" in also:
        write_workbook(done, folder)
    if "parquet" in also:
        for name, frame in done.tables.items():
            write_parquet(frame, folder / "tables" / f"{name}.parquet")
    write_text(folder / MARK, record_text(done))


def write_report(done: Run, folder: Path) -> None:
    """report.html and charts/*.svg."""
    from cohortflow.report import content_of, files_of

    for name, text in files_of(content_of(done)).items():
        write_text(folder / name, text)


def write_workbook(done: Run, folder: Path) -> None:
    """workbook.xlsx: a summary and one sheet a table."""
    from cohortflow.report.workbook import workbook_bytes

    study = done.study
    facts = {
        "as of": study.as_of.isoformat() if study.as_of else "",
        "model": study.model.name,
        "joiners": study.joiners.method,
        "level of bands": study.level,
        "seed": study.seed,
        "made with": f"cohortflow {__version__}",
        **{name.replace("_", " "): value for name, value in asdict(study.people).items()},
    }
    (folder / "workbook.xlsx").write_bytes(workbook_bytes(study.title, facts, done.tables, epoch=epoch()))


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
        "assumptions": assumption_log(study, model_chosen=done.choice is not None),
        "inputs": [asdict(file) for file in done.inputs],
        "accounting": done.tables["accounting"].to_dict(orient="records"),
        "findings": [finding.to_dict() for finding in done.findings],
        "warnings": list(done.warnings),
        "absent": dict(done.absent),
        "tables": {
            name: {"rows": len(frame), "columns": [str(c) for c in frame.columns]}
            for name, frame in done.tables.items()
        },
    }
