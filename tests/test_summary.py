"""Scores of a backtest and how far it bears a model out: from tables made by hand."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.assessment.backtest import Backtest
from cohortflow.assessment.summary import validated

ORIGINS = 12


def record(rows, horizon=2, history=None):
    """Backtest of rows (model, origin, horizon, predicted, actual, low, high, interval_score)."""
    columns = ["model", "origin", "horizon", "predicted", "actual", "low", "high", "interval_score"]
    frame = pd.DataFrame(rows, columns=columns).assign(quantity="all_live", crps=1.0)
    frame["inside"] = (frame["low"] <= frame["actual"]) & (frame["actual"] <= frame["high"])
    empty = pd.DataFrame()
    past = {"all_live": np.array([10.0, 12.0, 11.0, 13.0]) if history is None else history}
    return Backtest(frame, empty, empty, past, ("plain",), (3, 4, 5), 0, horizon, 0.9, 100, "none")


def rows_of(model, score, *, horizons=(1, 2), inside=lambda o, h: True, error=2.0, origins=ORIGINS):
    out = []
    for o in range(origins):
        for h in horizons:
            band = (95, 105) if inside(o, h) else (101, 105)
            out.append((model, f"{o:02d}", h, 100 + error, 100, *band, score))
    return out


def test_scores_by_hand():
    rows = rows_of("last_mix", 20.0) + rows_of("plain", 15.0, inside=lambda o, h: o % 4 > 0)
    scores = record(rows).scores.set_index(["model", "horizon"])
    plain = scores.loc[("plain", 2)]
    assert (plain["origins"], plain["effective_origins"], plain["coverage"]) == (12, 6, 0.75)
    assert plain["skill"] == pytest.approx(1 - 15 / 20)
    assert plain["mean_error"] == 2.0  # predicted less actual
    assert plain["mase"] == pytest.approx(2 / (5 / 3))  # history up to the first origin: (2 + 1 + 2) / 3
    assert scores.loc[("last_mix", 1), "skill"] == 0


def test_constant_history_has_no_scale_and_says_so():
    rows = rows_of("last_mix", 20.0) + rows_of("plain", 15.0)
    row = record(rows, history=np.ones(4)).scores.iloc[0]
    assert np.isnan(row["mase"]) and row["note"] == "constant_history"


def test_forecasts_without_bands_are_said_to_have_none():
    rows = [(*r[:5], np.nan, np.nan, np.nan) for r in rows_of("last_mix", 1.0)]
    row = record(rows).scores.iloc[0]
    assert (row["note"], row["origins"]) == ("no_bands", 0)


def test_skill_compares_the_same_origins():
    # last_mix has no band at the first six origins, where plain is bad: they do not count
    early = [(*r[:7], np.nan) for r in rows_of("last_mix", 20.0)[:12]]
    plain = rows_of("plain", 500.0)[:12] + rows_of("plain", 10.0)[12:]
    scores = record(early + rows_of("last_mix", 20.0)[12:] + plain).scores.set_index(["model", "horizon"])
    assert scores.loc[("plain", 1), "skill"] == pytest.approx(0.5)


@pytest.mark.parametrize(
    "plain, periods, reason",
    [
        ({"score": 15.0}, 2, ""),
        ({"score": 25.0}, 0, "not_better_than_last_mix"),
        ({"score": 15.0, "inside": lambda o, h: h == 1}, 1, "coverage"),
        ({"score": 15.0, "inside": lambda o, h: False}, 0, "coverage"),
        ({"score": 15.0, "origins": 7}, 0, "too_few_origins"),
    ],
)
def test_validated(plain, periods, reason):
    scores = record(rows_of("last_mix", 20.0) + rows_of("plain", **plain)).scores
    found = validated(scores, 0.9)
    assert found["model"].tolist() == ["plain"]
    assert (found["periods"][0], found["reason"][0]) == (periods, reason)
