"""What the user asked for on the command line, as one record; and the study that it names."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from click.core import ParameterSource

from cohortflow.cli.options import SETTINGS
from cohortflow.errors import CallError, nearest
from cohortflow.study import Study, default_study, read_study
from cohortflow.study.data_file import is_data_file

KEPT = ("by", "force", "form", "keep_values", "strict", "quiet", "dry_run")
TAKEN = ("study", "settings", "exits", "out")
Source = Callable[[str], ParameterSource | None]


@dataclass(frozen=True)
class Call:
    """One command line, checked as far as it can be without opening the study.

    `overrides` and `set_by` are those of `read_study`; `form` is table, csv or json; `extra` holds a
    command's own.
    """

    command: str
    study_path: Path
    overrides: Mapping[str, Any]
    set_by: Mapping[str, str]
    exits: tuple[str, ...] = ()
    by: str | None = None
    out: Path | None = None
    force: bool = False
    form: str = "table"
    keep_values: bool = False
    strict: bool = False
    quiet: bool = False
    dry_run: bool = False
    extra: Mapping[str, Any] = field(default_factory=dict)

    def study(self) -> Study:
        """The study with its overrides; a bare data file gets a study of its own."""
        if not is_data_file(self.study_path):
            if self.exits:
                raise CallError("--exit is for a data file; a study file names its exits by role.")
            return self._checked(read_study(self.study_path, overrides=self.overrides, set_by=self.set_by))
        overrides = dict(self.overrides)
        if self.by is not None:
            overrides.setdefault("input.segments", [self.by])
        return self._checked(
            default_study(self.study_path, exits=self.exits, overrides=overrides, set_by=self.set_by)
        )

    def _checked(self, study: Study) -> Study:
        spec = study.input
        columns = [*spec.segments, *spec.attributes, *([spec.arm] if spec.arm else [])]
        if self.by is not None and self.by not in columns:
            named = ", ".join(f'"{column}"' for column in columns) or "no column"
            raise CallError(
                f'--by "{self.by}" is no segment of the study{nearest(self.by, columns)}. '
                f"[input] segments, attributes and arm name {named}."
            )
        return study


def call_of(command: str, given: Mapping[str, Any], source: Source) -> Call:
    """The Call for parsed options; later `--set` wins over earlier, a named option over `--set`."""
    overrides: dict[str, Any] = {}
    set_by: dict[str, str] = {}
    for text in given["settings"]:
        key, equals, value = text.partition("=")
        if not equals:
            raise CallError(f'--set "{text}" needs table.key=value, for instance study.level=0.8.')
        overrides[key.strip()], set_by[key.strip()] = value.strip(), _origin(source("settings"))
    for option, key in SETTINGS.items():
        if given[option] is not None:
            overrides[key], set_by[key] = given[option], _origin(source(option))
    kept = {name: given[name] for name in KEPT}
    extra = {name: value for name, value in given.items() if name not in {*KEPT, *SETTINGS, *TAKEN}}
    out = Path(given["out"]) if given["out"] is not None else None
    return Call(
        command, Path(given["study"]), overrides, set_by, tuple(given["exits"]), out=out, extra=extra, **kept
    )


def _origin(source: ParameterSource | None) -> str:
    return "environment" if source is ParameterSource.ENVIRONMENT else "option"
