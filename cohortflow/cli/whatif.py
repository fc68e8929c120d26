"""`cohortflow whatif STUDY`: the scenarios and the ranking of levers; with --target the change needed."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from cohortflow.cli.call import Call
from cohortflow.cli.options import study_command

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run

EXAMPLES = """\
cohortflow whatif veg/veg_box.toml                               scenarios, and what to do first
cohortflow whatif veg/veg_box.toml --target base=5500            what each lever must do for that
cohortflow whatif veg/veg_box.toml --target net --lever quiet:weekly
cohortflow whatif veg/veg_box.toml --format csv > scenarios.csv"""

TARGET = click.Option(
    ["--target"],
    metavar="TARGET=MARK",
    help="The change that brings TARGET to MARK: base, base:weekly, settled_base, life, value:total; or net.",
)
LEVER = click.Option(
    ["--lever", "levers"],
    multiple=True,
    metavar="FROM:TO",
    envvar="COHORTFLOW_LEVER",
    help="With --target: only this move; may be repeated. Default: the five that matter most.",
)


@study_command("whatif", EXAMPLES, extra=(TARGET, LEVER))
def command(call: Call) -> int:
    """Compare the study's scenarios with the forecast as it stands, and rank what one point of each move is
    worth.

    Differences are paired: both forecasts share their draws. With --target the smallest change of a lever
    that reaches a mark ("base=5500": live customers at the horizon), or how far it goes. STUDY as for
    `check`. CSV: the table of scenarios, or of levers when the study has no scenario.
    """
    from cohortflow.cli.stage import perform
    from cohortflow.report.plans import whatif_text
    from cohortflow.report.terminal import findings_text
    from cohortflow.runs.plans import parse_lever, parse_target, required_study

    target = parse_target(call.extra["target"]) if call.extra.get("target") else None
    levers = [parse_lever(text) for text in call.extra.get("levers", ())]

    def words(done: Run) -> str:
        study, forecast = done.study, done.forecasts["all"]
        needed = required_study(study, forecast, *target, levers) if target else ()
        currency = study.value.currency if study.value else ""
        return whatif_text(
            done.tables, currency=currency, kind=study.calendar.kind, findings=findings_text(done.findings),
            required=needed,
        )  # fmt: skip

    return perform(call, "scenarios", words)
