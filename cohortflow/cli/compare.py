"""`cohortflow compare RUN_A RUN_B`: the bridge from one forecast to the next; actual against forecast."""

from __future__ import annotations

from pathlib import Path

import click

from cohortflow.cli.console import Console
from cohortflow.cli.faults import DONE, FINDING
from cohortflow.cli.options import FORMATS, Command

EXAMPLES = """\
cohortflow compare forecasts/2026Q2 forecasts/2026Q3
cohortflow compare forecasts/2026Q2 forecasts/2026Q3 --period 2026-12 --out q3-against-q2
cohortflow compare q2 q3 --past q1 --past last-q4    calibration over more forecasts
cohortflow compare q2 q3 --format csv > bridge.csv"""


@click.command(cls=Command, examples=EXAMPLES)
@click.argument("run_a", metavar="RUN_A")
@click.argument("run_b", metavar="RUN_B")
@click.option("--past", multiple=True, metavar="RUN", help="A still older run; may be repeated.")
@click.option("--period", metavar="P", help="The common period told first; default: the last one.")
@click.option("--allow-restated", is_flag=True, help="Compare although the definitions differ.")
@click.option("--out", metavar="FOLDER", help="Write tables, charts and page into this new folder.")
@click.option("--force", is_flag=True, help="Replace the folder if an earlier comparison wrote it.")
@click.option(
    "--format", "form", type=click.Choice(FORMATS), default="table", show_default=True,
    envvar="COHORTFLOW_FORMAT", help="Form of the result on stdout.",
)  # fmt: skip
@click.option("--strict", is_flag=True, help="End with code 1 when definitions differ or a part is missing.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr but refusals.")
def command(
    run_a: str,
    run_b: str,
    past: tuple[str, ...],
    period: str | None,
    allow_restated: bool,
    out: str | None,
    force: bool,
    form: str,
    strict: bool,
    quiet: bool,
) -> int:
    """Why the forecast changed from RUN_A (the last) to RUN_B (this one), and how RUN_A did since.

    Both are folders that `cohortflow run` wrote; the extract is not read again. The change is split into data
    restated, who is there now, segments, joiners, rates by move, model, values and adjustments; the parts add
    up and prefer no order. CSV: the table bridge; --out writes the others too.
    """
    from cohortflow.report.comparison import comparison_text
    from cohortflow.report.table import csv_text
    from cohortflow.runs.comparison import compare, comparison_json

    done = compare(
        run_a, run_b, past=past, period=period, allow_restated=allow_restated, out=out, force=force
    )
    console = Console(quiet)
    if form == "table":
        console.result(comparison_text(done))
    else:
        console.result(csv_text(done.to_frame()) if form == "csv" else comparison_json(done))
    if out is not None:
        console.say(f"Written to {Path(out)}")
    return FINDING if strict and (done.restated or done.notes) else DONE
