"""`cohortflow draft DATA`: a starter study from an extract."""

from __future__ import annotations

import json
from pathlib import Path

import click

from cohortflow.cli.console import Console
from cohortflow.cli.options import FORMATS, Command

EXAMPLES = """\
cohortflow draft log.csv                           writes study.toml
cohortflow draft exports/log-*.csv --out club.toml
cohortflow draft log.csv --dry-run                 shows the study, writes nothing
cohortflow draft log.csv --column customer=kunde --date-format %d/%m/%Y"""


@click.command(cls=Command, examples=EXAMPLES)
@click.argument("data", nargs=-1, required=True, metavar="DATA...")
@click.option(
    "--out", default="study.toml", show_default=True, metavar="FILE", help="The study file to write."
)
@click.option("--force", is_flag=True, help="Replace the file if it exists.")
@click.option(
    "--column",
    "pairs",
    multiple=True,
    metavar="ROLE=NAME",
    help="What a column is, if the guess is wrong; may be repeated.",
)
@click.option("--date-format", metavar="FORMAT", help="Where day and month cannot be told apart, %d/%m/%Y.")
@click.option("--encoding", metavar="NAME", help="Encoding of the files, cp1252.")
@click.option("--delimiter", metavar="SIGN", help="Sign between the columns.")
@click.option(
    "--format",
    "form",
    type=click.Choice(FORMATS),
    default="table",
    show_default=True,
    help="Form of the result on stdout.",
)
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr but refusals.")
@click.option("--dry-run", is_flag=True, help="Show the study file that would be written; write nothing.")
def command(
    data: tuple[str, ...], out: str, force: bool, pairs: tuple[str, ...], date_format: str | None,
    encoding: str | None, delimiter: str | None, form: str, quiet: bool, dry_run: bool,
) -> int:  # fmt: skip
    """Look at an extract (columns, names, dates, ids, dialect) and write a commented starter study.

    DATA: the files of one extract, with one header. States are the extract's own events or states. Exits are not
    guessed: names after which nothing follows stand in the study as comments; uncomment what means having left.
    Roles: customer, time, event, state, end, from, to, n. CSV: the names and their place in the histories.
    """
    from cohortflow.record import plain
    from cohortflow.report.profile import profile_text
    from cohortflow.report.table import csv_text
    from cohortflow.runs.draft import draft

    made = draft(
        data,
        out=Path(out),
        force=force,
        write=not dry_run,
        encoding=encoding,
        delimiter=delimiter,
        date_format=date_format,
        columns=_columns(pairs),
    )
    console = Console(quiet)
    if form == "json":
        console.result(json.dumps(plain(made.profile.to_dict()), indent=2, ensure_ascii=False) + "\n")
    elif form == "csv":
        console.result(csv_text(made.profile.to_frame()))
    else:
        console.result(profile_text(made.profile, made.exits) + (f"\n{made.text}" if dry_run else ""))
    if dry_run:
        console.say(f"Would write {made.path}; nothing was done (--dry-run)")
        return 0
    console.say(
        f"Written to {made.path}; {made.questions} lines say CONFIRM. Next: cohortflow check {made.path}"
    )
    return 0


def _columns(pairs: tuple[str, ...]) -> dict[str, str]:
    from cohortflow.errors import CallError

    out = {}
    for pair in pairs:
        role, equals, name = pair.partition("=")
        if not equals or not name:
            raise CallError(f'--column "{pair}" needs ROLE=NAME, for instance customer=member_no.')
        out[role.strip()] = name
    return out
