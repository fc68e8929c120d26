"""Where things are written: results on stdout, messages on stderr, progress only on a terminal."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from dataclasses import dataclass

import click


@dataclass(frozen=True)
class Console:
    """`quiet` keeps messages back; refusals are told in any case (see faults.py)."""

    quiet: bool = False

    def result(self, text: str) -> None:
        """A result, unchanged, on stdout."""
        click.echo(text, nl=False)

    def say(self, text: str) -> None:
        """A message on stderr."""
        if not self.quiet:
            click.echo(text, err=True)

    def progress(self) -> Callable[[str], None]:
        """Told what is being done now; each new step is said once, and only when stderr is a terminal."""
        shown: list[str] = []

        def step(what: str) -> None:
            if sys.stderr.isatty() and not self.quiet and what not in shown[-1:]:
                shown.append(what)
                click.echo(f"{what} ...", err=True)

        return step


def json_line(kind: str, **content: str) -> str:
    """A small result as JSON, with kind and format version (report/schema.py).

    >>> print(json_line("demo", folder="veg", study="veg/veg_box.toml").splitlines()[1])
      "kind": "demo",
    """
    from cohortflow.report.schema import FORMAT_VERSION

    whole = {"kind": kind, "format_version": FORMAT_VERSION, **content}
    return json.dumps(whole, indent=2, ensure_ascii=False) + "\n"
