"""`cohortflow run STUDY`: all of it into one folder, with the report."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run
    from cohortflow.study import Study

EXAMPLES = """\
cohortflow run veg/veg_box.toml
cohortflow run veg/veg_box.toml --out forecasts/2026Q3
cohortflow run veg/veg_box.toml --as-of 2026-06-30 --by channel --out midyear
cohortflow run veg/veg_box.toml --workbook --parquet --force
COHORTFLOW_HORIZON=6 cohortflow run veg/veg_box.toml --force"""


WORKBOOK = click.Option(["--workbook"], is_flag=True, help="Also workbook.xlsx: a summary, and a sheet a table.")
PARQUET = click.Option(["--parquet"], is_flag=True, help="Also each table as a Parquet file beside its CSV file.")


@study_command("run", EXAMPLES, extra=(WORKBOOK, PARQUET))
def command(call: Call) -> int:
    """Make the whole forecast and write it into one folder: tables, charts, counts and report.html.

    STUDY as for `check`. Without --out the folder is forecasts/STUDY-PERIOD, after the last counted period.
    The same input, study and seed give the same bytes. CSV: the list of tables; JSON: everything.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.report.terminal import run_text
    from cohortflow.states import ALL_LIVE

    def words(done: Run) -> str:
        states = done.study.states
        return run_text(done.tables, done.findings, (ALL_LIVE, *done.study.totals, *states.remaining))

    return perform(call, "", words, folder=default_folder)


def default_folder(study: Study) -> Path:
    """forecasts/veg_box-2026-09."""
    stem = (study.path or Path("study")).name.split(".")[0]
    last = study.last_complete
    return Path("forecasts") / (stem if last is None else f"{stem}-{study.calendar.label(last)}")
