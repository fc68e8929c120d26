"""The same count inside an existing Spark cluster: customers are split over the workers, only counts come back.

Two passes, both with the code of this room on each part of the customers (Arrow in, no pandas frame sent):
the first gathers the facts of the whole that a part cannot know (see whole.py), the second labels and counts.
Tallies of disjoint customers add up, so the sum is the Tally that one machine would have made.

cohortflow must be installed on the workers. One part must fit in the memory of a worker; take more parts for a
larger table.
"""

from __future__ import annotations

import io
import json
import tempfile
from collections.abc import Callable
from functools import partial, reduce
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.errors import CallError, CohortflowError, InputError, NotIdentified, listed
from cohortflow.history.check import COLUMNS, Check, Finding
from cohortflow.history.engine import opened
from cohortflow.history.events import has_clock_times, instants_present, read_event_rows
from cohortflow.history.histories import map_labels, periods_present, read_state_rows
from cohortflow.history.load import load, refuse_unknown_names
from cohortflow.history.reading import History, Reading, check_missing
from cohortflow.history.sources import frame_source
from cohortflow.history.store import load_tally, save_tally
from cohortflow.history.whole import Whole
from cohortflow.study import Study
from cohortflow.tally import Tally

PARTS = 200
PART = "cohortflow_part"
ANSWER = "kind string, name string, payload binary"
LAYOUTS = ("events", "history")


def count_on_spark(dataframe: Any, study: Study, *, parts: int = PARTS, order: str | None = None) -> Tally:
    """The Tally of a Spark DataFrame of raw rows, labelled and counted on the cluster.

    dataframe : columns as the study's [input] names them;  parts : into how many the customers are split
    order : column that tells the order of rows at one instant (a record number); without it rows that nothing
        else orders are taken in the order of their text

    Raises what `read` raises; CallError for a layout other than events and history.

    >>> import cohortflow as cf
    >>> spark = SparkSession.builder.getOrCreate()  # doctest: +SKIP
    >>> cf.history.count_on_spark(spark.read.parquet("events"), cf.read_study("veg_box.toml"))  # doctest: +SKIP
    <tally of 9,057 customers, 2023-10 to 2026-09, 133,827 moves>
    """
    return read_on_spark(dataframe, study, parts=parts, order=order).tally


def read_on_spark(dataframe: Any, study: Study, *, parts: int = PARTS, order: str | None = None) -> History:
    """As `count_on_spark`, with the accounting and the findings; `rejected` stays on the cluster and is empty."""
    if study.input.layout not in LAYOUTS:
        raise CallError(
            f'On a cluster the layouts {listed(LAYOUTS)} can be counted; this study has "{study.input.layout}".'
        )
    split = _split(dataframe, study, parts)
    facts = [Whole(**json.loads(row.payload)) for row in _answers(split, partial(_facts, study))]
    whole = Whole.of_parts(facts)
    check_missing(whole.missing, whole.rows, study.input.customer)
    answers = _answers(split, partial(_counts, study, whole, order))
    tallies = [_unpacked(row.payload) for row in answers if row.kind == "tally"]
    if not tallies:
        raise InputError("The table holds no rows. Give an extract with rows.")
    tally = reduce(lambda a, b: a + b, tallies)
    _refuse_without_exits(tally)
    tally.check_conservation()
    check = _joined([json.loads(row.payload) for row in answers if row.kind == "check"])
    nothing = pd.DataFrame(columns=["file", "line", "column", "reason"])
    return History(study.states, study.calendar, check, nothing, (), tally)


# ---- on the cluster ----
def _split(dataframe: Any, study: Study, parts: int) -> Any:
    from pyspark.sql import functions as f

    customer = study.input.customer or "customer"
    if customer not in dataframe.columns:
        raise InputError(f'The table has no column "{customer}". It has {listed(dataframe.columns)}.')
    key = f.coalesce(f.col(f"`{customer.replace('`', '``')}`").cast("string"), f.lit(""))
    return dataframe.withColumn(PART, f.pmod(f.xxhash64(key), f.lit(int(parts))).cast("int")).groupBy(PART)


def _answers(split: Any, work: Callable[[Any], Any]) -> list[Any]:
    """Answers of all parts in a fixed order; a refusal of any part is raised here."""
    rows = split.applyInArrow(_guarded(work), ANSWER).collect()
    refused = sorted((row for row in rows if row.kind == "refusal"), key=lambda r: r.payload)
    if refused:
        known: tuple[type[CohortflowError], ...] = (CohortflowError, *CohortflowError.__subclasses__())
        kinds = {kind.__name__: kind for kind in known}
        raise kinds.get(refused[0].name, InputError)(refused[0].payload.decode())
    return sorted(rows, key=lambda r: (r.kind, r.name, r.payload))


def _guarded(work: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """A refusal becomes an answer, so that its text reaches the user without the cluster's traceback."""

    def guarded(table: Any) -> Any:
        try:
            answers = work(table.drop_columns([PART]))
        except CohortflowError as refusal:
            answers = [("refusal", type(refusal).__name__, str(refusal).encode())]
        return _table(answers)

    return guarded


def _table(answers: list[tuple[str, str, bytes]]) -> Any:
    import pyarrow as pa

    columns = list(zip(*answers, strict=True))
    types = (pa.string(), pa.string(), pa.binary())
    arrays = [pa.array(values, type=kind) for values, kind in zip(columns, types, strict=True)]
    return pa.table(arrays, names=["kind", "name", "payload"])


def _facts(study: Study, table: Any) -> list[tuple[str, str, bytes]]:
    with opened(input_bytes=table.nbytes) as engine:
        reading = _loaded(engine, study, table, None)
        known: dict[str, Any] = {
            "rows": reading.loaded.rows,
            "missing": int(engine.one("SELECT count(*) FROM rows WHERE fault = 1")),
        }
        if study.input.layout == "events":
            known |= {"clocked": has_clock_times(reading), "instants": instants_present(reading)}
        else:
            map_labels(reading)
            known["periods"] = periods_present(reading)
    return [("facts", "", json.dumps(known).encode())]


def _counts(study: Study, whole: Whole, order: str | None, table: Any) -> list[tuple[str, str, bytes]]:
    ordered = _ordered(table, order)
    with opened(input_bytes=table.nbytes) as engine:
        reading = _loaded(engine, study, ordered, whole)
        refuse_unknown_names(engine, study, reading.loaded)
        label = read_event_rows if study.input.layout == "events" else read_state_rows
        sweep = label(reading)
        tally = sweep.tally()
        check = reading.accounting(sweep.accounts)
    report = {
        "rows": check.accounting.to_dict(orient="list"),
        "findings": [g.to_dict() for g in check.findings],
    }
    return [("tally", "", _packed(tally)), ("check", "", json.dumps(report, default=str).encode())]


def _ordered(table: Any, order: str | None) -> Any:
    """Rows in a fixed order, whatever order the cluster delivered them in."""
    if order is not None:
        return table.sort_by(order).drop_columns([order])
    return table.sort_by([(name, "ascending") for name in table.column_names])


def _loaded(engine: Any, study: Study, table: Any, whole: Whole | None) -> Reading:
    def quiet(stage: str, share: float) -> None:
        del stage, share

    return Reading(
        engine, study, load(engine, study, [frame_source(engine, table, "table")], quiet), quiet, whole=whole
    )


# ---- small answers to and fro ----
def _packed(tally: Tally) -> bytes:
    """The files of a saved tally in one archive."""
    import zipfile

    out = io.BytesIO()
    with tempfile.TemporaryDirectory() as folder, zipfile.ZipFile(out, "w") as archive:
        save_tally(tally, folder)
        for path in sorted(Path(folder).iterdir()):
            archive.writestr(zipfile.ZipInfo(path.name), path.read_bytes())
    return out.getvalue()


def _unpacked(payload: bytes) -> Tally:
    import zipfile

    with tempfile.TemporaryDirectory() as folder, zipfile.ZipFile(io.BytesIO(payload)) as archive:
        archive.extractall(folder)
        return load_tally(folder)


def _joined(reports: list[dict[str, Any]]) -> Check:
    """One accounting and one list of findings; findings of one code add up."""
    accounting = pd.concat([pd.DataFrame(r["rows"]) for r in reports], ignore_index=True)
    accounting = accounting.groupby(list(COLUMNS[:4]), as_index=False, sort=False)[
        ["rows", "customers"]
    ].sum()
    whole: dict[str, Finding] = {}
    for found in (f for report in reports for f in report["findings"]):
        before = whole.get(found["code"])
        whole[found["code"]] = Finding(
            found["code"],
            found["rows"] + (before.rows if before else 0),
            found["customers"] + (before.customers if before else 0),
            found["serious"],
            detail=found["detail"],
        )
    return Check(accounting[list(COLUMNS)], tuple(whole.values()))


def _refuse_without_exits(tally: Tally) -> None:
    exits = tally.states.exits
    moves = tally.tables["moves"]
    if exits and not moves["state"].isin([tally.states.index(e) for e in exits]).any():
        raise NotIdentified(
            f"No customer ever reached an exit ({listed(exits)}), so how many leave cannot be estimated. "
            "Take the extract from all who ever were customers."
        )
