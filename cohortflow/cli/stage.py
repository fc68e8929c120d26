"""What check, fit, project and run share: one library call, `cf.run(study, upto=...)`, then the result."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

from cohortflow.cli.call import Call
from cohortflow.cli.console import Console
from cohortflow.cli.faults import DONE, FINDING
from cohortflow.cli.plan import plan_text
from cohortflow.record import plain
from cohortflow.report.table import csv_text
from cohortflow.report.wording import note
from cohortflow.runs.folder import ALSO, Run, run
from cohortflow.runs.write import record
from cohortflow.study import Study

Words = Callable[[Run], str]


def perform(call: Call, main: str, words: Words, *, folder: Callable[[Study], Path] | None = None) -> int:
    """Make the run up to the command's stage; print `words`, the table `main` as CSV, or everything as JSON.

    `folder` names the output folder when --out does not.
    """
    study, console = call.study(), Console(call.quiet)
    out = call.out if call.out is not None or folder is None else folder(study)
    if call.dry_run:
        console.result(plan_text(call, study, out))
        return DONE
    done = run(
        study,
        upto=call.command,
        by=call.by,
        out=out,
        force=call.force,
        keep_values=call.keep_values,
        also=[name for name in ALSO if call.extra.get(name)],
        progress=console.progress(),
    )
    console.result(shown(done, call.form, main, words))
    if call.form != "table":
        for finding in done.serious:
            console.say(f"finding: {note(finding)}")
    for warning in done.warnings:
        console.say(warning)
    if done.path:
        console.say(f"Written to {done.path}")
    return FINDING if call.strict and done.serious else DONE


def shown(done: Run, form: str, main: str, words: Words) -> str:
    """The result in the form asked for."""
    if form == "csv":
        return csv_text(done.tables[main] if main in done.tables else done.to_frame())
    if form == "json":
        tables = {name: frame.to_dict(orient="records") for name, frame in done.tables.items()}
        return json.dumps(plain({**record(done), "tables": tables}), indent=2, ensure_ascii=False) + "\n"
    return words(done)
