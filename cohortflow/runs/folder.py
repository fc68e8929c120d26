"""One forecast, from study to folder: every step in order, then all of it written at once or not at all.

    RUN/ run.json  report.html  rejected.csv  charts/*.svg  tally/  tables/*.csv

What cannot be made (no exit, no data) is absent, not empty; run.json says why. Same input, study and seed
give the same bytes: rows are sorted, floats written in full, no time is written but SOURCE_DATE_EPOCH's.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, ClassVar, TypeVar

import pandas as pd

from cohortflow.assessment import Adequacy, Backtest, Choice
from cohortflow.errors import CallError, NotIdentified, listed, nearest
from cohortflow.estimator import Fit
from cohortflow.history import Check, Finding, History, InputFile, count, read
from cohortflow.record import Record, frozen_mapping
from cohortflow.runs import write
from cohortflow.runs.findings import fit_findings, not_yet
from cohortflow.runs.place import whole_folder
from cohortflow.runs.plans import Plans, plan_tables, plans_study
from cohortflow.runs.sign_off import sign_off_tables
from cohortflow.runs.steps import Forecast, fit_study, forecast_study
from cohortflow.runs.tables import fit_tables, forecast_tables, in_order
from cohortflow.runs.trust import BEST, adequacy_study, backtest_study, chosen, windows_study
from cohortflow.study import Study, read_study
from cohortflow.tally import Tally

STAGES: dict[str, frozenset[str]] = {
    "check": frozenset(),
    "fit": frozenset({"fit", "adequacy"}),
    "project": frozenset({"fit", "forecast"}),
    "whatif": frozenset({"fit", "forecast", "plans"}),
    "backtest": frozenset({"fit", "backtest"}),
    "run": frozenset({"fit", "adequacy", "forecast", "plans", "backtest"}),
}
ALSO = ("workbook", "parquet")
Progress = Callable[[str], None]
T = TypeVar("T")


@dataclass(frozen=True, repr=False, eq=False)
class Run(Record):
    """A forecast as far as it was made.

    stage : check | fit | project | backtest | run, what was made
    plans : segment -> its scenarios and levers
    adequacy, backtest, choice : the tests of the assumptions; past forecasts; the model chosen by them
    tables : the contract's tables by name;  absent : those that could not be made -> the reason
    findings : what a reader must know before believing the numbers; the serious ones stand with --strict
    inputs : fingerprints of the files read;  warnings : sentences on parts of the study not used yet
    path : the folder, None when nothing was written
    """

    study: Study
    stage: str
    by: str | None
    check: Check
    rejected: pd.DataFrame
    tally: Tally | None
    fit: Fit | None
    forecasts: Mapping[str, Forecast]
    tables: Mapping[str, pd.DataFrame]
    absent: Mapping[str, str]
    findings: tuple[Finding, ...]
    inputs: tuple[InputFile, ...]
    warnings: tuple[str, ...] = ()
    adequacy: Adequacy | None = None
    backtest: Backtest | None = None
    choice: Choice | None = None
    plans: Mapping[str, Plans] = field(default_factory=dict)
    path: Path | None = None
    kind: ClassVar[str] = "run"

    def to_frame(self) -> pd.DataFrame:
        """table, rows, columns: what there is."""
        rows = [(name, len(frame), ", ".join(map(str, frame.columns))) for name, frame in self.tables.items()]
        return pd.DataFrame(rows, columns=["table", "rows", "columns"])

    def headline(self) -> str:
        where = f" in {self.path}" if self.path else ""
        return f"{self.stage} of {self.study.title}: {len(self.tables)} tables{where}"

    def about(self) -> Mapping[str, Any]:
        findings = [finding.to_dict() for finding in self.findings]
        return {"stage": self.stage, "by": self.by, "seed": self.study.seed, "findings": findings}

    @property
    def serious(self) -> tuple[Finding, ...]:
        """Findings that stand in the way under --strict."""
        return tuple(finding for finding in self.findings if finding.serious)


def run(
    study: Study | str | Path,
    *,
    upto: str = "run",
    by: str | None = None,
    out: str | Path | None = None,
    force: bool = False,
    keep_values: bool = False,
    also: Collection[str] = (),
    progress: Progress | None = None,
) -> Run:
    """Do everything that a study asks for, or only up to a stage, and write it into one folder.

    Parameters
    ----------
    study : a Study, or the path of a study file
    upto : "check" (read, label, account), "fit" (rates, and whether a chain is good enough), "project"
        (futures), "whatif" (scenarios and levers), "backtest" (past forecasts against what happened) or "run"
        (all, charts and report too)
    by : a segment column: also separately for each of its values
    out : the new folder; None writes nothing. `force` replaces an earlier run there
    keep_values : write the offending values into rejected.csv too (they may be personal data)
    also : "workbook" (workbook.xlsx, the same tables as sheets), "parquet" (each table beside its CSV file)
    progress : told what is being done

    Raises OutputError when the folder may not be written, and whatever the steps refuse.

    >>> import pathlib, tempfile
    >>> from cohortflow.study import default_study
    >>> rows = ["customer,period,state", "a,1,fresh", "a,2,steady", "b,1,fresh", "b,2,left", "c,2,fresh"]
    >>> with tempfile.TemporaryDirectory() as home:
    ...     panel = pathlib.Path(home) / "panel.csv"
    ...     _ = panel.write_text("\\n".join(rows))
    ...     done = run(default_study(panel, exits=["left"]), upto="fit")
    >>> done
    <fit of panel.csv: 3 tables>
    >>> done.fit.counts.loc["fresh"].tolist()
    [0.0, 1.0, 1.0]
    """
    if upto not in STAGES:
        raise CallError(f'Unknown stage "{upto}"{nearest(upto, STAGES)}. Stages: {listed(STAGES)}.')
    _check_also(also, out)
    study = study if isinstance(study, Study) else read_study(study)
    tell = progress or _silent
    if out is None:
        return _made(study, upto, by, tell, keep_values=keep_values)
    with whole_folder(Path(out), force=force) as part:
        done = _made(study, upto, by, tell, keep_values=keep_values)
        tell("writing")
        write.run_folder(done, part, also=also)
    return replace(done, path=Path(out))


def _check_also(also: Collection[str], out: str | Path | None) -> None:
    """Refuse before hours of work what could not be written after them."""
    for name in also:
        if name not in ALSO:
            raise CallError(f'Nothing is called "{name}"{nearest(name, ALSO)}. also takes {listed(ALSO)}.')
    if also and out is None:
        raise CallError(f"{listed(also)} needs a folder to be written into: give out= (--out).")
    if "workbook" in also:
        from cohortflow.report.workbook import check_available

        check_available()


def _made(study: Study, upto: str, by: str | None, tell: Progress, *, keep_values: bool) -> Run:
    tell("reading")
    history = read(study, progress=lambda stage, share: tell(stage), keep_values=keep_values)
    tables = {"accounting": history.check.to_frame()}
    if upto == "check":
        return Run(
            study, upto, by, history.check, history.rejected, None, None, frozen_mapping({}),
            frozen_mapping(tables), frozen_mapping({}), history.check.findings, history.inputs,
        )  # fmt: skip
    return _forecast(study, upto, by, tell, history, tables)


def _forecast(
    study: Study, upto: str, by: str | None, tell: Progress, history: History, tables: dict[str, pd.DataFrame]
) -> Run:
    parts, tally, absent = STAGES[upto], count(history), {}
    tested, choice = None, None
    if "backtest" in parts or study.model.name == BEST:
        tell("forecasting the past")
        tested, absent["backtest"] = _or_reason(lambda: backtest_study(study, tally))
        if tested is None and study.model.name == BEST:
            raise NotIdentified(f"No model can be chosen by backtest: {absent['backtest']} Name a model.")
        study, choice = chosen(study, tested) if tested is not None else (study, None)
    tell("fitting")
    fitted = fit_study(study, tally, by=by)
    tables |= fit_tables(fitted, level=study.level)
    trusted = None
    if "adequacy" in parts:
        tell("testing assumptions")
        trusted, absent["adequacy"] = _or_reason(lambda: adequacy_study(study, tally, by=by))
        waits, absent["windows"] = _or_reason(lambda: windows_study(study, tally))
        tables |= {"windows": waits.to_frame()} if waits is not None else {}
    forecasts: dict[str, Forecast] = {}
    if "forecast" in parts:
        tell("projecting")
        forecasts = {forecast.segment: forecast for forecast in forecast_study(study, fitted)}
        tables |= forecast_tables(forecasts.values())
    plans: dict[str, Plans] = {}
    if "plans" in parts:
        tell("comparing scenarios")
        plans = {segment: plans_study(study, forecast) for segment, forecast in forecasts.items()}
        tables |= plan_tables(list(plans.values()))
        absent |= {what: why for part in plans.values() for what, why in part.absent.items()}
    tables |= {n: r.to_frame() for n, r in (("adequacy", trusted), ("backtest", tested)) if r is not None}
    if forecasts:
        tables |= sign_off_tables(study, tables)
    return Run(
        study,
        upto,
        by,
        history.check,
        history.rejected,
        tally,
        fitted,
        frozen_mapping(forecasts),
        frozen_mapping(in_order(tables)),
        frozen_mapping(_absent(absent, forecasts, tables)),
        (*history.check.findings, *fit_findings(fitted)),
        history.inputs,
        tuple(not_yet(study, used={"scenarios"} if plans else ())) if forecasts else (),
        trusted,
        tested,
        choice,
        frozen_mapping(plans),
    )


def _or_reason(make: Callable[[], T]) -> tuple[T | None, str]:
    """What `make` gives, or None and the reason why these data do not determine it."""
    try:
        return make(), ""
    except NotIdentified as error:
        return None, str(error)


def _absent(
    known: Mapping[str, str], forecasts: Mapping[str, Forecast], tables: Mapping[str, pd.DataFrame]
) -> dict[str, str]:
    """Tables that could not be made, with the reason (of the first segment)."""
    reasons = {name: reason for name, reason in known.items() if reason}
    for forecast in forecasts.values():
        for name, reason in forecast.absent.items():
            if name not in tables:
                reasons.setdefault(name, reason)
    return reasons


def _silent(what: str) -> None:
    return None
