"""The options that every command on a study takes, and the class of those commands."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import click

FORMATS = ("table", "csv", "json")
SETTINGS = {
    "as_of": "study.as_of",
    "level": "study.level",
    "horizon": "study.horizon",
    "model": "model.name",
    "seed": "study.seed",
}
CONTEXT = {"help_option_names": ["-h", "--help"], "auto_envvar_prefix": "COHORTFLOW"}


class Command(click.Command):
    """A command whose help leads with examples."""

    def __init__(self, *args: Any, examples: str = "", **kwargs: Any) -> None:
        kwargs.setdefault("context_settings", CONTEXT)
        super().__init__(*args, **kwargs)
        self.examples = examples

    def format_help(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        formatter.write("Examples:\n" + "".join(f"  {line}\n" for line in self.examples.splitlines()) + "\n")
        super().format_help(ctx, formatter)


def study_command(
    name: str, examples: str, *, extra: Sequence[click.Parameter] = ()
) -> Callable[[Callable[..., int]], Command]:
    """Decorator: a command on STUDY with the common options and `extra` ones; the function gets a `Call`."""

    def decorate(function: Callable[..., int]) -> Command:
        @click.pass_context
        def callback(ctx: click.Context, /, **given: Any) -> int:
            from cohortflow.cli.call import call_of

            return function(call_of(name, given, ctx.get_parameter_source))

        callback.__doc__ = function.__doc__
        params: list[click.Parameter] = [click.Argument(["study"], metavar="STUDY"), *extra, *common()]
        return Command(name, callback=callback, params=params, help=function.__doc__, examples=examples)

    return decorate


def common() -> list[click.Parameter]:
    """The common options, in the order of their help."""
    option = click.Option
    return [
        option(["--as-of"], metavar="DAY", help="Last day the extract can be trusted, 2026-09-30."),
        option(["--horizon"], type=int, metavar="N", help="Periods to project."),
        option(["--level"], type=float, metavar="SHARE", help="Level of intervals and bands, 0.90."),
        option(["--model"], metavar="NAME", help="Model of the rates."),
        option(["--seed"], type=int, metavar="N", help="Seed of everything drawn."),
        option(["--by"], metavar="SEGMENT", help="Also separately for each value of this segment column."),
        option(
            ["--set", "settings"],
            multiple=True,
            metavar="TABLE.KEY=VALUE",
            envvar="COHORTFLOW_SET",
            help="Any setting of the study file; may be repeated.",
        ),
        option(
            ["--exit", "exits"],
            multiple=True,
            metavar="NAME",
            envvar="COHORTFLOW_EXIT",
            help="When STUDY is a data file: a state (or event) that means having left.",
        ),
        option(["--out"], metavar="FOLDER", help="Write the tables into this new folder."),
        option(["--force"], is_flag=True, help="Replace the folder if an earlier run wrote it."),
        option(
            ["--format", "form"],
            type=click.Choice(FORMATS),
            default="table",
            show_default=True,
            envvar="COHORTFLOW_FORMAT",
            help="Form of the result on stdout.",
        ),
        option(
            ["--keep-values"],
            is_flag=True,
            help="Write the offending values into rejected.csv too; they may be personal data.",
        ),
        option(["--strict"], is_flag=True, help="End with code 1 when a finding stands."),
        option(["--quiet", "-q"], is_flag=True, help="No messages on stderr but refusals."),
        option(["--dry-run"], is_flag=True, help="Say what would be read and written; do nothing."),
    ]
