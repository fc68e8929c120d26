"""`cohortflow demo DIR`: the invented scenario, to try everything on."""

from __future__ import annotations

import click

from cohortflow.cli.console import Console, json_line
from cohortflow.cli.options import Command

EXAMPLES = """\
cohortflow demo veg
cohortflow run veg/veg_box.toml"""


@click.command(cls=Command, examples=EXAMPLES)
@click.argument("directory", metavar="DIR")
@click.option("--force", is_flag=True, help="Replace the folder if an earlier demo wrote it.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr but refusals.")
@click.option("--format", "form", type=click.Choice(("table", "json")), default="table", show_default=True,
              envvar="COHORTFLOW_FORMAT", help="The study file's path, or JSON.")  # fmt: skip
def command(directory: str, force: bool, quiet: bool, form: str) -> int:
    """Write the demo scenario into DIR: an event log, its study file, a budget and a plan of joiners.

    The "Hollin Weir veg box" is invented; its generator, with the true rates, is there too.
    """
    from cohortflow.runs.demo import write_demo

    folder = write_demo(directory, force=force)
    console = Console(quiet=quiet)
    study = folder / "veg_box.toml"
    console.result(json_line("demo", folder=str(folder), study=str(study)) if form == "json" else f"{study}\n")
    console.say(f"Next: cohortflow run {folder / 'veg_box.toml'}")
    return 0
