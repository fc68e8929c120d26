"""The Tally in a folder: one Parquet file a table and meta.json; the same tally gives the same bytes."""

from __future__ import annotations

import json
from datetime import date
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.errors import DefinitionsDiffer, InputError
from cohortflow.history.engine import opened, quoted
from cohortflow.periods import Calendar
from cohortflow.record import frozen_mapping
from cohortflow.states import States
from cohortflow.tally import FORMAT_VERSION, KEYS, VALUES, Meta, Tally, canonical

META = "meta.json"
_PLAIN = (
    "first",
    "last",
    "customers",
    "definitions",
    "gap_rule",
    "bucket_bits",
    "sample_level",
    "weighted",
    "weight_scale",
    "amount_scale",
    "format_version",
)


def save_tally(tally: Tally, folder: str | Path) -> None:
    """Write a tally into a folder (made if need be): moves.parquet, ..., meta.json.

    >>> import tempfile, cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"])
    >>> tally = cf.read_counts([(1, "fresh", "steady", 8), (1, "fresh", "left", 2)], states)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     save_tally(tally, folder)
    ...     load_tally(folder).counts().tolist()
    [[0, 8, 2], [0, 0, 0], [0, 0, 0]]
    """
    target = Path(folder)
    target.mkdir(parents=True, exist_ok=True)
    with opened(threads=1) as engine:
        for name in KEYS:
            table = tally.tables[name]
            engine.register("saved", table)
            columns = ", ".join(f'"{c}"' for c in (*KEYS[name], *VALUES[name]))
            engine.run(
                f"COPY (SELECT {columns} FROM saved) TO {quoted(str(target / f'{name}.parquet'))} "
                "(FORMAT parquet, COMPRESSION zstd)"
            )
            engine.connection.unregister("saved")
    text = json.dumps(_meta_to_dict(tally.meta), indent=1, ensure_ascii=False, sort_keys=True)
    (target / META).write_text(text + "\n", encoding="utf-8")


def load_tally(folder: str | Path) -> Tally:
    """Read back what `save_tally` wrote; InputError when files are missing or damaged."""
    source = Path(folder)
    try:
        meta = _meta_from_dict(json.loads((source / META).read_text(encoding="utf-8")))
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputError(
            f"{source / META}: cannot read the saved counts ({error}). A run folder keeps them under tally/."
        ) from None
    if meta.format_version != FORMAT_VERSION:
        raise DefinitionsDiffer(
            f"{source}: these counts have format {meta.format_version}; this program reads {FORMAT_VERSION}. "
            "Count the extract again."
        )
    tables: dict[str, pd.DataFrame] = {}
    with opened(threads=1) as engine:
        for name in KEYS:
            path = source / f"{name}.parquet"
            try:
                tables[name] = engine.connection.execute(
                    f"SELECT * FROM read_parquet({quoted(str(path))})"
                ).df()
            except Exception as error:
                raise InputError(
                    f"{path}: cannot read the saved counts: {str(error).splitlines()[0]}."
                ) from None
    return Tally(meta, frozen_mapping({name: canonical(name, table) for name, table in tables.items()}))


def _meta_to_dict(meta: Meta) -> dict[str, Any]:
    states, calendar = meta.states, meta.calendar
    return {
        **{name: getattr(meta, name) for name in _PLAIN},
        "states": {
            "names": list(states.names),
            "exits": list(states.exits),
            "entries": list(states.entries),
            "away": list(states.away),
            "impossible": [list(pair) for pair in states.impossible],
        },
        "calendar": {
            "kind": calendar.kind,
            "week_starts": calendar.week_starts,
            "fiscal_year_start": calendar.fiscal_year_start,
            "own": [[label, a.isoformat(), b.isoformat()] for label, a, b in calendar.own],
        },
        "segment_columns": [list(pair) for pair in meta.segment_columns],
        "segments": [list(values) for values in meta.segments],
        "tables": list(meta.tables),
    }


def _meta_from_dict(data: dict[str, Any]) -> Meta:
    calendar = dict(data["calendar"])
    own = tuple((label, date.fromisoformat(a), date.fromisoformat(b)) for label, a, b in calendar.pop("own"))
    names = data["states"].pop("names")
    return Meta(
        states=States(names, **data["states"]),
        calendar=Calendar(**calendar, own=own),
        segment_columns=tuple((c, role) for c, role in data["segment_columns"]),
        segments=tuple(tuple(values) for values in data["segments"]),
        tables=tuple(data["tables"]),
        **{name: data[name] for name in _PLAIN},
    )
