"""A run read back from its folder alone: record, counts, tables, and the study as far as a forecast needs it."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.errors import InputError
from cohortflow.history import load_tally
from cohortflow.record import frozen_mapping, plain
from cohortflow.report.text import neutral
from cohortflow.runs.folder import Run
from cohortflow.runs.place import MARK
from cohortflow.runs.write import FORMAT_VERSION, record
from cohortflow.study import Study
from cohortflow.study.parts import (
    Adjustment,
    BudgetRow,
    InputSpec,
    JoinerSpec,
    ModelSpec,
    MoveValue,
    People,
    PlannedJoiners,
    ValueSpec,
)
from cohortflow.tally import Tally

TEXT = frozenset({"segment", "period", "kind", "state", "line", "exit", "measure", "from", "to", "quantity"})
NEEDED = ("projection", "rollforward")


@dataclass(frozen=True, eq=False)
class OpenRun:
    """What a comparison uses of a run.

    name : of its folder;  record : run.json;  by : the segment column it was also made for
    study : the forecast's settings only: rules and layout of the extract are not read back
    projection, rollforward : those tables, of all customers
    """

    name: str
    record: Mapping[str, Any]
    study: Study
    tally: Tally
    by: str | None
    projection: pd.DataFrame
    rollforward: pd.DataFrame

    @property
    def base(self) -> int:
        """Ordinal of the last counted period."""
        return self.tally.meta.last

    @property
    def label(self) -> str:
        """Label of the last counted period."""
        return self.tally.calendar.label(self.base)

    @property
    def definitions(self) -> str:
        """Digest of what the counts mean."""
        return str(self.record["definitions"])


def open_run(run: Run | OpenRun | str | Path) -> OpenRun:
    """A Run, or the folder of one. InputError when something that a comparison needs is not there."""
    if isinstance(run, OpenRun):
        return run
    if isinstance(run, Run):
        if run.tally is None or NEEDED[0] not in run.tables:
            raise InputError(
                f'The run of "{run.study.title}" holds no projection; make it with `cohortflow run`.'
            )
        name = run.path.name if run.path else run.study.title
        tables = [_of_all(run.tables[table]) for table in NEEDED]
        return OpenRun(name, plain(record(run)), run.study, run.tally, run.by, *tables)
    folder = Path(run)
    data = _read_record(folder)
    tally = load_tally(folder / "tally")
    study = study_of(data, tally)
    names = (*tally.states.names, *study.totals)
    tables = [_of_all(read_table(folder, table, names)) for table in NEEDED]
    return OpenRun(folder.resolve().name, frozen_mapping(data), study, tally, data.get("by"), *tables)


def _read_record(folder: Path) -> dict[str, Any]:
    try:
        data = json.loads((folder / MARK).read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(
            f'"{folder}" is not a run folder: {MARK} cannot be read ({error.strerror or error}). Give the folder '
            "that `cohortflow run` wrote."
        ) from None
    except ValueError as error:
        raise InputError(f'"{folder / MARK}" is damaged ({error}); make the run again.') from None
    if not isinstance(data, dict) or data.get("kind") != "run" or "study" not in data:
        raise InputError(f'"{folder / MARK}" is not the record of a run; make the run again.')
    if data.get("format_version") != FORMAT_VERSION:
        raise InputError(
            f'"{folder}" has format version {data.get("format_version")}, this program reads {FORMAT_VERSION}; '
            "make the run again with this version."
        )
    return data


def read_table(folder: Path, name: str, names: Iterable[str] = ()) -> pd.DataFrame:
    """A table of a run folder as it was before it was written: numbers as floats, names as they were.

    names : names that text cells may have, to take back what was done to keep spreadsheets from running them
    """
    path = folder / "tables" / f"{name}.csv"
    try:
        frame = pd.read_csv(path, dtype=str, keep_default_na=False)
    except OSError:
        raise InputError(
            f'"{folder}" has no table "{name}"; a comparison needs it. Make the run with `cohortflow run`.'
        ) from None
    written = {neutral(known): known for known in names}
    for column in frame.columns:
        if column in TEXT:
            frame[column] = frame[column].map(lambda text: written.get(text, text))
        else:
            frame[column] = _numbers(frame[column], path)
    return frame


def _numbers(cells: pd.Series, path: Path) -> list[float]:
    try:
        return [float(cell or "nan") for cell in cells]
    except ValueError as error:
        raise InputError(
            f"{path}: the column {cells.name} holds something else than numbers ({error}); the file was changed. "
            "Make the run again."
        ) from None


def _of_all(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[frame["segment"] == "all"].reset_index(drop=True)


def study_of(record: Mapping[str, Any], tally: Tally) -> Study:
    """The forecast's part of a study from the record of a run; states and calendar are the tally's."""
    data = record["study"]
    spec, model = data["input"], data["model"]
    return Study(
        tally.states,
        tally.calendar,
        title=data["title"],
        as_of=date.fromisoformat(data["as_of"]) if data["as_of"] else None,
        horizon=data["horizon"],
        level=data["level"],
        seed=data["seed"],
        input=InputSpec(layout=spec["layout"], segments=tuple(spec["segments"])),
        totals=frozen_mapping({name: tuple(members) for name, members in data["totals"].items()}),
        model=ModelSpec(**{**model, "bands": tuple(model["bands"]), "exclude": tuple(model["exclude"])}),
        joiners=_joiners(data["joiners"]),
        value=_value(data["value"]) if data["value"] else None,
        adjustments=tuple(Adjustment(**row) for row in data["adjustments"]),
        budget=tuple(BudgetRow(**row) for row in data["budget"]),
        people=People(**data["people"]),
        origin_of=frozen_mapping(record["set_by"]),
    )


def _joiners(data: Mapping[str, Any]) -> JoinerSpec:
    return JoinerSpec(data["method"], data["file"], tuple(PlannedJoiners(**row) for row in data["rows"]))


def _value(data: Mapping[str, Any]) -> ValueSpec:
    moves = tuple(MoveValue(row["from"], row["to"], row["amount"]) for row in data["on_move"])
    per_period = None if data["per_period"] is None else frozen_mapping(data["per_period"])
    return ValueSpec(**{**data, "per_period": per_period, "on_move": moves})
