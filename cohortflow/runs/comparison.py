"""Two forecasts of one base compared: the bridge between them, and how the earlier one did.

Everything comes from the run folders; the extract is not needed again.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, ClassVar

import pandas as pd

from cohortflow import __version__
from cohortflow.errors import CallError, DefinitionsDiffer, listed, nearest
from cohortflow.record import Record, frozen_mapping, plain
from cohortflow.report.table import csv_text
from cohortflow.runs.bridge import bridge
from cohortflow.runs.folder import Run
from cohortflow.runs.opened import OpenRun, open_run
from cohortflow.runs.outcome import against_budget, calibration, outcome, outcome_lines
from cohortflow.runs.place import whole_folder, write_text
from cohortflow.states import ALL_LIVE

COMPARE_MARK = "compare.json"
DEFINING = ("states", "calendar", "rules", "events", "input")
Source = Run | OpenRun | str | Path


@dataclass(frozen=True, repr=False, eq=False)
class Comparison(Record):
    """Two runs compared.

    earlier, later : names of their folders;  first, last : labels of their last counted periods
    period : the common period that is told first (the last one, unless asked for)
    tables : bridge, bridge_details, outcome, outcome_lines, budget, calibration, settings
    notes : codes of what a reader must know;  restated : the definitions differ, and the caller said so
    """

    earlier: str
    later: str
    first: str
    last: str
    period: str
    level: float
    title: str
    currency: str
    unit: str
    tables: Mapping[str, pd.DataFrame]
    notes: tuple[str, ...] = ()
    restated: bool = False
    path: Path | None = None
    kind: ClassVar[str] = "comparison"

    def to_frame(self) -> pd.DataFrame:
        """The bridge: quantity, period, part, amount."""
        return self.tables["bridge"]

    def headline(self) -> str:
        rows = self.tables["bridge"]
        own = rows[(rows["quantity"] == ALL_LIVE) & (rows["period"] == self.period)].set_index("part")[
            "amount"
        ]
        a, b = own["last_forecast"], own["this_forecast"]
        return f"all_live of {self.period}: {a:,.0f} as forecast from {self.first}, {b:,.0f} from {self.last}"

    def about(self) -> Mapping[str, Any]:
        return {
            "earlier": self.earlier,
            "later": self.later,
            "first": self.first,
            "last": self.last,
            "period": self.period,
            "level": self.level,
            "restated": self.restated,
            "notes": list(self.notes),
        }


def compare(
    run_a: Source,
    run_b: Source,
    *,
    past: Sequence[Source] = (),
    period: str | None = None,
    allow_restated: bool = False,
    out: str | Path | None = None,
    force: bool = False,
) -> Comparison:
    """Compare the last forecast (run_a) with this one (run_b), from their folders alone.

    Parameters
    ----------
    run_a, run_b : run folders, or Runs; b is counted as late as a, or later
    past : still older runs, for the calibration: how often the bands held
    period : the common period that is told first; default: the last one that both forecasts cover
    allow_restated : compare although the definitions differ; what that does is part of "data_restated"
    out : a new folder for tables, charts and page; `force` replaces an earlier comparison there

    Raises DefinitionsDiffer for other states, another calendar or other definitions; InputError for folders
    that cannot be read, do not repeat, or have no period in common; CallError for the order or the period.

    >>> import pathlib, tempfile
    >>> import cohortflow as cf
    >>> paths = {"ann": "ffss", "ben": "fsss", "cat": "fl", "dan": "fssl"}
    >>> names = {"f": "fresh", "s": "steady", "l": "left"}
    >>> rows = [f"{who},{t},{names[s]}" for who, path in paths.items() for t, s in enumerate(path)]
    >>> text = "\\n".join(["customer,period,state", *rows])
    >>> study = '''[study]\\nperiod = "step"\\nhorizon = 3\\n[input]\\nlayout = "history"
    ... files = ["panel.csv"]\\ncustomer = "customer"\\ntime = "period"\\nstate = "state"
    ... [[state]]\\nname = "fresh"\\nrole = "entry"\\n[[state]]\\nname = "steady"
    ... [[state]]\\nname = "left"\\nrole = "exit"\\n'''
    >>> with tempfile.TemporaryDirectory() as home:
    ...     folder = pathlib.Path(home)
    ...     _ = (folder / "panel.csv").write_text(text), (folder / "panel.toml").write_text(study)
    ...     ahead = cf.run(folder / "panel.toml", upto="project", out=folder / "one")
    ...     same = cf.compare(folder / "one", folder / "one")
    >>> same
    <all_live of 6: 1 as forecast from 3, 1 from 3>
    """
    earlier, later = open_run(run_a), open_run(run_b)
    older = [open_run(run) for run in past]
    restated = [_check_pair(run, later, allow_restated=allow_restated) for run in (*older, earlier)]
    made = bridge(earlier, later)
    common = list(pd.unique(made.frame["period"]))
    outcomes = [outcome(run, later.tally) for run in (*older, earlier)]
    tables = {
        "bridge": made.frame,
        "bridge_details": made.details,
        "outcome": pd.concat(outcomes, ignore_index=True),
        "outcome_lines": outcome_lines(earlier, later.tally),
        "budget": against_budget(later),
        "calibration": calibration(outcomes),
        "settings": settings(earlier, later),
    }
    done = Comparison(
        earlier.name, later.name, earlier.label, later.label, _period(period, common), later.study.level,
        later.study.title, later.study.value.currency if later.study.value else "", later.study.calendar.kind,
        frozen_mapping(tables), made.notes, any(restated),
    )  # fmt: skip
    return done if out is None else _written(done, Path(out), force=force)


def _check_pair(earlier: OpenRun, later: OpenRun, *, allow_restated: bool) -> bool:
    """Whether the definitions differ; refused unless allowed, and whenever states or calendar do."""
    a, b = earlier.tally, later.tally
    if a.states.names != b.states.names or a.states.exits != b.states.exits:
        raise DefinitionsDiffer(
            f'The states differ: "{earlier.name}" has {listed(a.states.names)}, "{later.name}" has '
            f"{listed(b.states.names)} (exits {listed(a.states.exits)} and {listed(b.states.exits)}). A bridge "
            "needs the same states in both; make the earlier run again with the later study."
        )
    if (a.calendar.kind, a.calendar.own[:1]) != (b.calendar.kind, b.calendar.own[:1]):
        raise DefinitionsDiffer(
            f'The periods differ: "{earlier.name}" counts by {a.calendar.kind}, "{later.name}" by {b.calendar.kind}. '
            "Make both runs with one calendar."
        )
    if earlier.base > later.base:
        raise CallError(
            f'"{earlier.name}" is counted up to {earlier.label}, later than "{later.name}" ({later.label}); give '
            "the earlier run first."
        )
    if earlier.definitions == later.definitions:
        return False
    if not allow_restated:
        changed = settings(earlier, later)
        names = changed.loc[changed["kind"] == "definition", "setting"]
        raise DefinitionsDiffer(
            f'"{earlier.name}" and "{later.name}" were made under different definitions ({listed(names)}): their '
            "customers are not counted alike. Make the earlier run again with the later study, or say "
            "--allow-restated (allow_restated=True) to show the effect as restated data."
        )
    return True


def _period(wanted: str | None, common: list[str]) -> str:
    if wanted is None:
        return common[-1]
    if wanted not in common:
        raise CallError(
            f'Period "{wanted}" is not in both forecasts{nearest(wanted, common)}; they share {listed(common)}.'
        )
    return wanted


def settings(earlier: OpenRun, later: OpenRun) -> pd.DataFrame:
    """What was set differently: setting, kind (definition, setting), last, this; JSON texts."""
    a, b = (dict(_flat(run.record["study"])) for run in (earlier, later))
    rows = []
    for key in sorted({*a, *b}):
        if a.get(key) != b.get(key):
            kind = "definition" if key.split(".")[0].split("[")[0] in DEFINING else "setting"
            rows.append(
                (key, kind, *(json.dumps(plain(side.get(key)), ensure_ascii=False) for side in (a, b)))
            )
    return pd.DataFrame(rows, columns=["setting", "kind", "last", "this"])


def _flat(value: Any, name: str = "") -> Iterable[tuple[str, Any]]:
    """Settings by dotted name; lists of tables by number, other lists whole."""
    if isinstance(value, Mapping):
        for key, item in value.items():
            yield from _flat(item, f"{name}.{key}" if name else str(key))
    elif isinstance(value, list) and any(isinstance(item, Mapping) for item in value):
        for number, item in enumerate(value):
            yield from _flat(item, f"{name}[{number + 1}]")
    else:
        yield name, value


def _written(done: Comparison, target: Path, *, force: bool) -> Comparison:
    with whole_folder(target, force=force, mark=COMPARE_MARK) as part:
        for name, frame in done.tables.items():
            write_text(part / "tables" / f"{name}.csv", csv_text(frame))
        from cohortflow.report.of_comparison import comparison_files

        for name, text in comparison_files(done).items():
            write_text(part / name, text)
        write_text(part / COMPARE_MARK, comparison_json(done, rows=False))
    return replace(done, path=target)


def comparison_json(done: Comparison, *, rows: bool = True) -> str:
    """The comparison as JSON: kind, format_version, program, about, and every table's rows or its size."""
    tables: dict[str, Any] = {
        name: frame.to_dict(orient="records")
        if rows
        else {"rows": len(frame), "columns": [str(c) for c in frame.columns]}
        for name, frame in done.tables.items()
    }
    content = {
        "kind": done.kind,
        "format_version": done.format_version,
        "program": {"name": "cohortflow", "version": __version__},
        "about": dict(done.about()),
        "tables": tables,
    }
    return json.dumps(plain(content), indent=2, ensure_ascii=False, allow_nan=False) + "\n"
