"""The report of a Run: its records' codes and settings as Facts, its tables as a Content, its files as text."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from cohortflow import __version__
from cohortflow.errors import CallError, CohortflowError, OutputError
from cohortflow.estimator import fit
from cohortflow.projector import step_counts
from cohortflow.projector.bands import quantile_band
from cohortflow.report.ahead import approach
from cohortflow.report.content import Content, Facts
from cohortflow.report.page import page_html, wide_charts
from cohortflow.report.panel import panel
from cohortflow.report.past import Trust
from cohortflow.report.rounding import money, percent, unit
from cohortflow.report.rules import rule_words
from cohortflow.report.sections import gather
from cohortflow.report.text import label, listing
from cohortflow.states import ALL_LIVE
from cohortflow.study import Study

ALL = "all"
SLIDERS = 6
DRAWS = 2000


def content_of(run: Any, *, segment: str = ALL) -> Content:
    """The report of a run (or of one of its segments) as a Content. CallError when the run has no projection."""
    if not getattr(run, "forecasts", None) or segment not in run.forecasts:
        known = ", ".join(getattr(run, "forecasts", {}) or ["none"])
        raise CallError(
            f'There is no forecast of "{segment}" in this run; forecasts: {known}. Make a whole run first.'
        )
    forecast = run.forecasts[segment]
    schedule, joining = forecast.fit.schedule, _joining(forecast)
    start = forecast.fit.tally.mix()
    ahead = None
    if not schedule.unknown and float(start.sum()) > 0:
        first = forecast.fit.tally.meta.last - schedule.first if schedule.first is not None else 0
        ahead = approach(
            schedule, start.to_numpy(dtype=float), run.study.states, joining=joining, first_step=first
        )
    return gather(facts_of(run, segment=segment), run.tables, approach=ahead, panel=_panel(run, segment),
                  trust=_trust(run, segment))  # fmt: skip


def _trust(run: Any, segment: str) -> Trust:
    """The run's backtest, which is of all customers, and the plain chain's course beside a chosen model."""
    if segment != ALL:
        return Trust()
    forecast = run.forecasts[segment]
    plain = None
    if run.choice is not None and forecast.fit.model != "plain":
        fitted, states = fit(forecast.fit.tally, model="plain", exclude=forecast.fit.excluded), run.study.states
        ahead = step_counts(fitted.schedule, forecast.fit.tally.mix(), forecast.projection.periods,
                            forecast.joiners.expected())  # fmt: skip
        plain = ahead[:, states.live_mask].sum(axis=1)
    return Trust(run.backtest, run.choice, plain)


def _borne(run: Any, segment: str) -> dict[str, int]:
    """Quantity -> periods ahead that past forecasts vouch for; empty without a backtest of this forecast."""
    model = run.forecasts[segment].fit.model
    if segment != ALL or run.backtest is None or model not in run.backtest.models:
        return {}
    rows = run.backtest.validated
    own = rows[rows["model"] == model]
    return {str(q): int(n) for q, n in zip(own["quantity"], own["periods"], strict=True)}


def _joined(forecast: Any, level: float, seed: int) -> tuple[float, float, float] | None:
    """Expected number who join up to the horizon, with the band of its draws."""
    inflow = forecast.joiners.inflows.get("joined")
    if inflow is None or not inflow.mean.any():
        return None
    drawn = inflow.draw(DRAWS, np.random.default_rng(seed)).sum(axis=(1, 2))
    low, high = quantile_band(drawn, level)
    return float(inflow.mean.sum()), float(low), float(high)


def _terms(study: Study) -> tuple[str, ...]:
    """How money is counted, in sentences."""
    spec = study.value
    if spec is None:
        return ()
    one = unit(study.calendar.kind, 1)
    amount = partial(money, currency=spec.currency, decimals=2)
    prices = "as observed in the extract" if spec.per_period is None else listing(
        [f"{label(state)} {amount(paid)}" for state, paid in spec.per_period.items()], limit=12
    )  # fmt: skip
    margin = "" if spec.margin is None else f", times a margin of {percent(spec.margin, 0)}"
    moves = [f"{label(m.from_)} to {label(m.to)} {amount(m.amount)}" for m in spec.on_move]
    out = [
        f"Contribution of a customer a {one}: {prices}{margin}; other states nothing."
        + (f" On moves: {listing(moves, limit=12)}." if moves else ""),
        f"Discounted at {percent(spec.discount_rate)} a year, counted at the {spec.timing} of each {one}. This is "
        "contribution, not revenue.",
    ]
    return tuple(out)


def _panel(run: Any, segment: str) -> str:
    """The what-if panel of a run with levers: the moves of its scenarios, then those that matter most."""
    plans = (getattr(run, "plans", None) or {}).get(segment)
    if plans is None or not plans.levers:
        return ""
    forecast, study = run.forecasts[segment], run.study
    rows = plans.levers[0].to_frame()
    named = [(c.from_, c.to) for s in study.scenarios for c in s.change if c.from_ in study.states.names]
    best = [(a, b) for a, b in zip(rows["from"], rows["to"], strict=True) if a != b]
    moves = list(dict.fromkeys([*named, *best]))[:SLIDERS]
    try:
        made = panel(forecast.fit, moves=moves, periods=study.horizon, joiners=forecast.joiners, value=forecast.value)
    except CohortflowError:
        return ""
    return made.html


def _joining(forecast: Any) -> Any:
    """(K,) joiners and returners a period, or None when nobody joins."""
    constant = forecast.joiners.a_period()
    return constant if constant.sum() > 0 else None


def facts_of(run: Any, *, segment: str = ALL) -> Facts:
    """The Facts of one segment of a run."""
    study, forecast = run.study, run.forecasts[segment]
    fitted, tally, long_run = forecast.fit, forecast.fit.tally, forecast.long_run
    period = tally.calendar.label
    codes = dict.fromkeys(
        (*forecast.projection.reasons, *long_run.reasons, *_reasons(forecast.exits), *_reasons(forecast.value))
    )
    borne = _borne(run, segment)
    notes = (*run.findings, *(c for c in codes if c.partition(":")[0] not in _STRUCTURE))
    return Facts(
        title=study.title,
        states=study.states,
        calendar=study.calendar,
        level=study.level,
        horizon=forecast.projection.periods,
        first=period(fitted.first),
        last=period(tally.meta.last),
        as_of=study.as_of.isoformat() if study.as_of else "",
        seed=study.seed,
        model=fitted.model,
        joiners=forecast.joiners.method,
        customers=tally.meta.customers,
        moves=int(fitted.rates.n.sum()),
        totals=study.totals,
        excluded=tuple(period(p) for p in fitted.excluded),
        notes=notes,
        verdict=long_run.verdict,
        reasons=tuple(long_run.reasons),
        parts=tuple(forecast.projection.parts),
        validated=borne.get(ALL_LIVE),
        borne=borne,
        joining=_joined(forecast, study.level, study.seed),
        cases={s.name: s.case for s in study.scenarios if s.case},
        terms=_terms(study),
        rules={rule.name: rule_words(rule, study.calendar.kind) for rule in study.rules},
        inputs=tuple((i.name, i.bytes, i.rows, i.sha256) for i in run.inputs),
        settings=_settings(study),
        people={k: str(v) for k, v in vars(study.people).items() if v},
        absent=run.absent,
        version=__version__,
        segment=segment,
        currency=study.value.currency if study.value else "",
    )


_STRUCTURE = ("closed_group", "periodic_group", "several_groups", "exits_reachable")


def _reasons(record: Any) -> tuple[str, ...]:
    return () if record is None else tuple(record.reasons)


def _settings(study: Study) -> dict[str, str]:
    """Settings that did not come from the study file or a default: what somebody turned for this run."""
    return {
        name: origin
        for name, origin in sorted(study.origin_of.items())
        if origin not in ("study file", "default")
    }


def files_of(content: Content) -> Mapping[str, str]:
    """The report's files, relative to the run folder, as text: report.html and charts/*.svg."""
    drawn = wide_charts(content)
    head = '<?xml version="1.0" encoding="utf-8"?>\n'
    charts = {f"charts/{key}.svg": f"{head}{chart.text.rstrip()}\n" for key, chart in drawn.items()}
    return {"report.html": page_html(content, drawn), **charts}


def write_report(run: Any, path: str | Path, *, segment: str = ALL, force: bool = False) -> Path:
    """Write the page of a run to `path`. OutputError when the file is there already, unless `force`.

    >>> import cohortflow as cf
    >>> done = cf.run("veg_box/veg_box.toml")  # doctest: +SKIP
    >>> cf.write_report(done, "report.html")  # doctest: +SKIP
    PosixPath('report.html')
    """
    target = Path(path)
    if target.exists() and not force:
        raise OutputError(
            f"{target} is there already; nothing was written. Choose another path, or force=True."
        )
    text = page_html(content_of(run, segment=segment))
    try:
        target.write_text(text, encoding="utf-8", newline="\n")
    except OSError as error:
        raise OutputError(
            f"{target} cannot be written: {error.strerror or error}. Choose another path."
        ) from error
    return target
