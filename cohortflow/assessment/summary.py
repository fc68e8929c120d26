"""A backtest in figures: scores by horizon, and how far ahead a model's record bears it out.

Validated to h periods: at every horizon up to h there are at least 8 origins, the Wilson interval of the
coverage (with the effective number of origins) contains the level, and the mean interval score beats that of
the last mix carried forward.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from cohortflow.assessment.scores import coverage, naive_scale, skill

if TYPE_CHECKING:
    from cohortflow.assessment.backtest import Backtest

FEWEST_ORIGINS = 8
RIVAL = "last_mix"
KEYS = ["model", "horizon", "quantity"]


def summary(record: Backtest) -> pd.DataFrame:
    """Scores by model, horizon and quantity; see `Backtest.scores`."""
    rows = [(*key, *_scored(record, key, group)) for key, group in record.frame.groupby(KEYS, sort=False)]
    columns = [*KEYS, "origins", "effective_origins", "coverage", "coverage_low", "coverage_high"]
    columns += ["interval_score", "crps", "mean_error", "mase", "note"]
    out = pd.DataFrame(rows, columns=columns)
    out.insert(len(columns) - 1, "skill", [skill(*pair) for pair in _paired(record, out)])
    return out


def _scored(record: Backtest, key: tuple[Any, ...], rows: pd.DataFrame) -> tuple[Any, ...]:
    _, horizon, quantity = key
    scored = rows.dropna(subset=["interval_score"])
    seen = coverage(scored["inside"].to_numpy(float), horizon=int(horizon))
    error = (rows["predicted"] - rows["actual"]).dropna()
    history = record.history[quantity][: min(record.origins) - record.first + 1]
    scale = naive_scale(history)
    note = "" if not np.isnan(scale) else "constant_history"
    note = "no_bands" if scored.empty else note
    mean = scored[["interval_score", "crps"]].mean()
    return (
        seen.origins, seen.effective, seen.share, seen.low, seen.high, mean["interval_score"], mean["crps"],
        error.mean(), error.abs().mean() / scale, note,
    )  # fmt: skip


def _paired(record: Backtest, out: pd.DataFrame) -> list[tuple[float, float]]:
    """(own, last mix's) mean interval score over the origins where both have one."""
    table = record.frame.pivot_table(
        index="origin", columns=KEYS, values="interval_score", aggfunc="first", dropna=False
    )
    pairs = []
    for model, horizon, quantity in out[KEYS].itertuples(index=False):
        both = table[[(model, horizon, quantity), (RIVAL, horizon, quantity)]].dropna()
        pairs.append((float(both.iloc[:, 0].mean()), float(both.iloc[:, 1].mean())))
    return pairs


def validated(scores: pd.DataFrame, level: float) -> pd.DataFrame:
    """model, quantity, periods, reason for every model and quantity; see the module text.

    reason : what stopped it at the next horizon: too_few_origins | coverage | not_better_than_last_mix; ""
    when every horizon that was tried is borne out
    """
    rows = []
    for (model, quantity), group in scores.groupby(["model", "quantity"], sort=False):
        if model == RIVAL:
            continue
        reached, reason = 0, ""
        for row in group.sort_values("horizon").to_dict(orient="records"):
            reason = _objection(row, level)
            if reason:
                break
            reached = int(row["horizon"])
        rows.append((model, quantity, reached, reason))
    return pd.DataFrame(rows, columns=["model", "quantity", "periods", "reason"])


def _objection(row: Mapping[Any, Any], level: float) -> str:
    if row["origins"] < FEWEST_ORIGINS:
        return "too_few_origins"
    if not row["coverage_low"] <= level <= row["coverage_high"]:
        return "coverage"
    return "" if row["skill"] > 0 else "not_better_than_last_mix"
