"""The group of commands. Their one-line helps stand here, so that `--help` loads no command."""

from __future__ import annotations

import importlib

import click

from cohortflow import __version__
from cohortflow.cli.faults import UnknownCommand
from cohortflow.errors import listed, nearest

SUMMARY = {
    "demo": "Write the demo scenario: data, study file, plans.",
    "draft": "A starter study file from an extract.",
    "check": "Read, label and account for every row; no figures yet.",
    "fit": "Rates of every move, with intervals.",
    "project": "The mix period by period, where it settles, time to exit.",
    "whatif": "The scenarios, the levers, the change that a target needs.",
    "backtest": "Past forecasts against what happened, model against model.",
    "run": "All of it into one folder, with the report.",
    "compare": "Two runs: why the forecast changed; actual against forecast.",
    "sql": "The counting statement for a warehouse.",
}
EXAMPLES = """\
  cohortflow demo veg                     write the demo scenario into the folder veg
  cohortflow check veg/veg_box.toml       what was read, and what became of every row
  cohortflow run veg/veg_box.toml         the whole forecast, into one folder
  cohortflow project veg/veg_box.toml --horizon 6 --format csv > ahead.csv
  cohortflow fit panel.csv --exit left    a bare file: customer, period, state
"""
ENDING = """\
Results go to stdout, messages to stderr; nothing is coloured. Every option can also be set by an
environment variable (--level by COHORTFLOW_LEVEL) or in the study file: an option wins over the
environment, both over the file.

Exit codes: 0 done; 1 done, but with --strict a finding stands; 2 the input or the call was refused;
3 a fault of the program.

`cohortflow COMMAND --help` tells more.
"""


class Commands(click.Group):
    """A group whose commands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(SUMMARY)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in SUMMARY:
            return None
        command: click.Command = importlib.import_module(f"cohortflow.cli.{name}").command
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in SUMMARY and not args[0].startswith("-"):
            raise UnknownCommand(
                f'There is no command "{args[0]}"{nearest(args[0], SUMMARY)}. Commands: {listed(SUMMARY)}.'
            )
        return super().resolve_command(ctx, args)

    def format_help(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        formatter.write("Customer lifecycle and churn projection from raw event logs.\n\nExamples:\n")
        formatter.write(EXAMPLES + "\n")
        self.format_usage(ctx, formatter)
        with formatter.section("Commands"):
            formatter.write_dl(list(SUMMARY.items()))
        self.format_options(ctx, formatter)
        formatter.write("\n" + ENDING)

    def format_options(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        click.Command.format_options(self, ctx, formatter)


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="cohortflow")
def cohortflow() -> None:
    """Customer lifecycle and churn projection from raw event logs."""
