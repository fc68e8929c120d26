"""The library calls that a study amounts to, one function a step; `run` makes only these."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, TypeVar

import pandas as pd

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import Fit, fit
from cohortflow.estimator.shock_paths import future_rates
from cohortflow.estimator.variants import MODELS
from cohortflow.projector import (
    ExitTimes,
    Joiners,
    LongRun,
    Projection,
    Retention,
    Value,
    joiner_forecast,
    long_run,
    project,
    retention,
    time_to_exit,
    value,
)
from cohortflow.study import Study
from cohortflow.tally import Tally

ALL = "all"
DRAWS = 2000
T = TypeVar("T")


@dataclass(frozen=True)
class Forecast:
    """What one segment's fit leads to; `absent` names what could not be made, with the reason."""

    segment: str
    fit: Fit
    joiners: Joiners
    projection: Projection
    long_run: LongRun
    exits: ExitTimes | None
    retention: Retention | None
    value: Value | None
    absent: dict[str, str]


def fit_study(study: Study, tally: Tally, *, by: str | None = None) -> Fit:
    """`cf.fit(tally, model=..., window=..., half_life=..., exclude=..., by=...)` as [model] says."""
    name = study.model.name
    return fit(tally, model=name, by=by, exclude=study.model.exclude, **model_options(study, name))


def model_options(study: Study, name: str) -> dict[str, Any]:
    """What [model] says that the model `name` takes: window, half_life, bands, types."""
    spec = study.model
    taken = inspect.signature(MODELS[name]).parameters if name in MODELS else {}
    given = {"bands": spec.bands or None, "types": spec.types}
    options = {key: option for key, option in given.items() if option is not None and key in taken}
    return {"window": spec.window, "half_life": spec.half_life, **options}


def forecast_study(study: Study, fitted: Fit) -> Iterator[Forecast]:
    """The forecasts of all customers and, if the fit has segments, of each of them."""
    for segment, part in {ALL: fitted, **fitted.segments}.items():
        yield forecast_segment(study, part, segment)


def forecast_segment(study: Study, fitted: Fit, segment: str = ALL) -> Forecast:
    """`cf.project`, `long_run`, `time_to_exit`, `retention`, `value` of one fit, as the study says.

    Every call gets the study's level and, as `rng`, its seed, so that each can be repeated alone.
    """
    tally = fitted.tally
    joiners = joiners_study(study, tally, segment)
    shared: dict[str, Any] = {"level": study.level, "segment": segment, "rng": study.seed}
    absent: dict[str, str] = {}

    def tried(name: str, make: Callable[[], T]) -> T | None:
        try:
            return make()
        except NotIdentified as error:
            absent[name] = str(error)
            return None

    shocks = tried("shocks", lambda: future_rates(fitted, study.horizon, DRAWS, rng=study.seed))
    return Forecast(
        segment,
        fitted,
        joiners,
        project(fitted, periods=study.horizon, joiners=joiners, totals=study.totals, shocks=shocks,
                adjustments=study.adjustments if segment == ALL else (), **shared),
        long_run(fitted, joiners=joiners, start=base_of(tally), **shared),
        tried("exits", lambda: time_to_exit(fitted, **shared)),
        tried("retention", lambda: retention(fitted, periods=ages(study, tally), **shared)),
        tried("value", lambda: value_study(study, fitted, joiners, **shared)),
        absent,
    )


def base_of(tally: Tally) -> pd.Series | None:
    """Customers by state at the end of the last period; None when nobody is left: no mix is made up."""
    mix = tally.mix()
    return mix if mix.sum() > 0 else None


def ages(study: Study, tally: Tally) -> int:
    """Periods since joining that the retention curve covers: the window counted, or the horizon if longer."""
    return max(study.horizon, tally.meta.last - tally.meta.first)


def value_study(study: Study, fitted: Fit, joiners: Joiners, **shared: Any) -> Value | None:
    """`cf.value(fit, per_period=..., discount_rate=..., timing=...)` for ever; None without [value].

    `per_period = "observed"`: the mean amounts of the extract by state, times [value] margin.
    """
    spec = study.value
    if spec is None:
        return None
    return value(
        fitted,
        per_period="observed" if spec.per_period is None else spec.per_period,
        margin=1.0 if spec.margin is None else spec.margin,
        on_move=spec.on_move,
        discount_rate=spec.discount_rate,
        timing=spec.timing,
        first_period_discounted=spec.first_period_discounted,
        currency=spec.currency,
        start=base_of(fitted.tally),
        joiners=joiners.a_period(),
        **shared,
    )


def joiners_study(study: Study, tally: Tally, segment: str = ALL) -> Joiners:
    """`cf.joiner_forecast(tally, periods, method=...)`; "planned" with the rows of the file.

    Bare counts do not tell who joined: unless the study names a method, nobody joins. The plan of all
    customers adds up the segments; that of a segment is its own rows.
    """
    method = study.joiners.method
    if "starts" not in tally.meta.tables and study.origin_of.get("joiners.method", "default") == "default":
        method = "none"
    plan = [
        {"period": row.period, "kind": row.kind, "state": row.state, "customers": row.customers}
        for row in study.joiners.rows
        if segment in (ALL, row.segment)
    ]
    if method == "planned" and not plan:
        of = "" if segment == ALL else f' for the segment "{segment}"'
        raise CallError(
            f"{study.joiners.file} has no planned joiners{of}; give rows for it, or another [joiners] method."
        )
    return joiner_forecast(tally, study.horizon, method=method, plan=plan if method == "planned" else None)
