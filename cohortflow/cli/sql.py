"""`cohortflow sql STUDY`: the counting statement for a warehouse."""

from __future__ import annotations

from pathlib import Path

import click

from cohortflow.cli.console import Console, json_line
from cohortflow.cli.options import Command

EXAMPLES = """\
cohortflow sql panel.toml --dialect postgres --table crm.member_months
cohortflow sql panel.toml --dialect sqlite > count.sql"""


@click.command(cls=Command, examples=EXAMPLES)
@click.argument("study", metavar="STUDY")
@click.option("--dialect", default="duckdb", show_default=True, help="duckdb, postgres, spark or sqlite.")
@click.option("--table", default="history", show_default=True, help="The table with the rows.")
@click.option("--format", "form", type=click.Choice(("table", "json")), default="table", show_default=True,
              envvar="COHORTFLOW_FORMAT", help="The bare statement, or JSON.")  # fmt: skip
def command(study: str, dialect: str, table: str, form: str) -> int:
    """Print the statement that counts one-period moves where the rows live.

    The table has one row a customer and period, the period a whole number that grows by one; columns, states,
    exits, on_absent and moves declared impossible are those of the study (layout history). Read the answer
    back with layout = "counts".
    """
    from cohortflow.errors import StudyError
    from cohortflow.history.warehouse import counting_sql
    from cohortflow.study import read_study

    known = read_study(Path(study))
    spec = known.input
    if spec.layout != "history":
        raise StudyError(
            f'{study}: [input] layout is "{spec.layout}"; the counting statement needs layout = "history", one '
            "row a customer and period. Label events here (`cohortflow run`), or make such a table first."
        )
    sql = counting_sql(
        known.states,
        table=table,
        customer=spec.customer or "customer",
        period=spec.time or "period",
        state=spec.state or "state",
        on_absent=spec.on_absent,
        dialect=dialect,
    )
    if form == "json":
        sql = json_line("sql", dialect=dialect, table=table, statement=sql)
    Console().result(sql)
    return 0
