"""Where things are written: results on stdout, messages on stderr, progress only on a terminal."""

from __future__ import annotations

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
