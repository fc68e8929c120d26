"""The contract's tables of a run by name: frames in full precision, rows in a fixed order."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import pandas as pd

from cohortflow.estimator import Fit
from cohortflow.projector import cohort_table, rates_actual, rates_forecast, rollforward_actual
from cohortflow.projector.contribution import contribution_row
from cohortflow.runs.steps import Forecast

ORDER = (
    "accounting",
    "rates",
    "transitions",
    "adequacy",
    "projection",
    "rollforward",
    "rollforward_subtotals",
    "band_parts",
    "long_run",
    "exits",
    "cohorts",
    "retention",
    "windows",
    "value",
    "scenarios",
    "levers",
    "backtest",
    "definitions",
    "adjustments",
)


def fit_tables(fitted: Fit, *, level: float) -> dict[str, pd.DataFrame]:
    """`transitions`: Wilson limits at the study's level, at the effective numbers where customers repeat."""
    clustered = fitted.best_covariance == "customer"
    return {"transitions": fitted.interval(level, "wilson", clustered=clustered).to_frame()}


def forecast_tables(forecasts: Iterable[Forecast]) -> dict[str, pd.DataFrame]:
    """Tables of all segments' forecasts; a table that no segment has is absent."""
    parts: dict[str, list[pd.DataFrame]] = {}
    for forecast in forecasts:
        for name, frame in _frames(forecast).items():
            parts.setdefault(name, []).append(frame)
    return {name: pd.concat(frames, ignore_index=True) for name, frames in parts.items()}


def _frames(forecast: Forecast) -> dict[str, pd.DataFrame]:
    tally, projection, segment = forecast.fit.tally, forecast.projection, forecast.segment
    lines, rates = [projection.rollforward], [rates_forecast(projection)]
    if "starts" in tally.meta.tables:  # bare counts do not tell who came from where
        lines.insert(0, rollforward_actual(tally, segment=segment))
        rates.insert(0, rates_actual(tally, level=projection.level, segment=segment))
    frames = {
        "rates": pd.concat(rates, ignore_index=True),
        "projection": projection.to_frame(),
        "rollforward": pd.concat(lines, ignore_index=True),
        "band_parts": projection.band_parts,
        "long_run": forecast.long_run.to_frame(),
    }
    if "ages" in tally.meta.tables:
        frames["cohorts"] = cohort_table(tally, segment=segment)
    for name in ("exits", "retention", "value"):
        result = getattr(forecast, name)
        if result is not None:
            frames[name] = result.to_frame()
    if forecast.value is not None:
        whole = contribution_row(projection, forecast.value.terms, forecast.value.currency)
        frames["value"] = pd.concat([frames["value"], whole], ignore_index=True)
    return frames


def in_order(tables: Mapping[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    """The tables in the contract's order."""
    return {name: tables[name] for name in ORDER if name in tables}
