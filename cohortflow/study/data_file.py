"""A study made from a bare data file with the standard columns, for a first look without a study file."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from cohortflow.errors import CallError, InputError, listed, nearest
from cohortflow.periods import Calendar
from cohortflow.study.overrides import apply_overrides
from cohortflow.study.reading import study_from
from cohortflow.study.source import Source
from cohortflow.study.whole import Study

if TYPE_CHECKING:
    import pandas as pd

SUFFIXES = (".csv", ".csv.gz", ".tsv", ".tsv.gz", ".parquet")
HISTORY, EVENTS = ("customer", "period", "state"), ("customer", "time", "event")
MOST_STATES = 50
_LABELS = (
    ("step", r"-?\d+"),
    ("month", r"\d{4}-\d{2}"),
    ("quarter", r"\d{4}-Q[1-4]"),
    ("week", r"\d{4}-W\d{2}"),
    ("day", r"\d{4}-\d{2}-\d{2}"),
)


def is_data_file(path: str | Path) -> bool:
    """Whether a name looks like an extract rather than a study file."""
    return str(path).lower().endswith(SUFFIXES)


def default_study(
    data_path: str | Path,
    *,
    exits: Iterable[str] = (),
    overrides: Mapping[str, Any] | None = None,
    set_by: Mapping[str, str] | None = None,
) -> Study:
    """A study for a data file with the columns customer, period, state or customer, time, event.

    States are the names found in the file, sorted; those in `exits` are exits. With customer, period, state
    the periods are of the kind that their labels show (integers are steps), the extract is trusted to the end
    of its last one, and an exit that no row names is where customers go who stop appearing. With customer,
    time, event the periods are months, a customer's state is the latest event, and the extract is trusted up
    to its last day. `overrides` change any of it, as `--set` does. InputError without those columns.
    """
    path, exits = Path(data_path), tuple(exits)
    frame = _text_frame(path)
    if set(HISTORY) <= set(frame.columns):
        data = _from_history(frame, path, exits)
    elif set(EVENTS) <= set(frame.columns):
        data = _from_events(frame, path, exits)
    else:
        raise InputError(
            f"{path.name}: columns are {listed(frame.columns)}. Without a study file the columns must be "
            f"{listed(HISTORY)} or {listed(EVENTS)}; otherwise write a study file that names the columns."
        )
    changes = dict(overrides or {})
    source = Source(path.name, "", {key: (set_by or {}).get(key, "option") for key in changes})
    return study_from(apply_overrides(data, changes), source, path)


def _text_frame(path: Path) -> pd.DataFrame:
    import pandas as pd

    wanted = {*HISTORY, *EVENTS}
    try:
        if path.name.lower().endswith(".parquet"):
            frame = pd.read_parquet(path)
            return frame[[c for c in frame.columns if c in wanted]].astype("string")
        separator = "\t" if ".tsv" in path.name.lower() else ","
        return pd.read_csv(path, sep=separator, dtype="string", keep_default_na=False, encoding="utf-8-sig")
    except (OSError, ValueError, ImportError) as error:
        raise InputError(f"{path}: cannot read the data file: {error}.") from None


def _names(frame: pd.DataFrame, column: str, path: Path) -> list[str]:
    names = sorted({str(name).strip() for name in frame[column].dropna().unique()} - {""})
    if not names:
        raise InputError(f'{path.name}: the column "{column}" is empty, so there are no states.')
    if len(names) > MOST_STATES:
        raise InputError(
            f'{path.name}: the column "{column}" has {len(names)} different values, too many for states '
            f"(at most {MOST_STATES}); write a study file with rules."
        )
    return names


def _from_history(frame: pd.DataFrame, path: Path, exits: tuple[str, ...]) -> dict[str, Any]:
    names = _names(frame, "state", path)
    unseen = [name for name in exits if name not in names]
    if len(unseen) > 1:
        raise CallError(
            f"--exit {listed(unseen)}: no row of {path.name} has them, and only one exit can stand for "
            f"customers who stop appearing{nearest(unseen[0], names)}. States in the file: {listed(names)}."
        )
    labels = sorted({str(label).strip() for label in frame["period"].dropna().unique()} - {""})
    kind = _kind(labels, path)
    study: dict[str, Any] = {"period": kind, "title": path.name}
    if kind != "step":
        calendar = Calendar(kind)
        known = [calendar.parse(label) for label in labels if re.fullmatch(dict(_LABELS)[kind], label)]
        study["as_of"] = calendar.end(max(known)).isoformat()
    spec = {
        "layout": "history",
        "files": [path.name],
        "customer": "customer",
        "time": "period",
        "state": "state",
    }
    spec |= {"on_absent": unseen[0]} if unseen else {}
    roles = {name: "exit" for name in exits}
    tables = [{"name": name, "role": roles.get(name, "live")} for name in [*unseen, *names]]
    return {"study": study, "input": spec, "state": tables}


def _kind(labels: list[str], path: Path) -> str:
    """The kind of period that most labels show."""
    votes = {kind: sum(bool(re.fullmatch(shape, label)) for label in labels) for kind, shape in _LABELS}
    kind = max(votes, key=lambda k: votes[k])
    if not votes[kind]:
        raise InputError(
            f'{path.name}: the column "period" holds {listed(labels, 3)}; without a study file it must hold '
            'whole numbers or labels like "2026-09", "2026-Q3", "2026-W39" or "2026-09-30".'
        )
    return kind


def _from_events(frame: pd.DataFrame, path: Path, exits: tuple[str, ...]) -> dict[str, Any]:
    import pandas as pd

    names = _names(frame, "event", path)
    for name in exits:
        if name not in names:
            raise CallError(
                f'--exit "{name}": no event of {path.name} is called that{nearest(name, names)}. '
                f"Events: {listed(names)}."
            )
    days = pd.to_datetime(frame["time"].str.slice(0, 10), format="%Y-%m-%d", errors="coerce").dropna()
    if days.empty:
        raise InputError(
            f'{path.name}: the column "time" holds no date like "2026-09-30"; write a study file with '
            "date_format."
        )
    ordered = [*exits, *(name for name in names if name not in exits)]
    tables: list[dict[str, Any]] = [
        {
            "name": name,
            "role": "exit" if name in exits else "live",
            "when": {"last_event": [name], "among": ordered},
        }
        for name in ordered
    ]
    del tables[-1]["when"]
    spec = {
        "layout": "events",
        "files": [path.name],
        "customer": "customer",
        "time": "time",
        "event": "event",
        "returns": [name for name in names if name not in exits],
    }
    study = {"period": "month", "as_of": days.max().date().isoformat(), "title": path.name}
    return {"study": study, "input": spec, "state": tables}
