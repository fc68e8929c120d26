"""A small backtest that the report's tests share: two states and an exit, 30 months of 40 joiners each."""

from functools import cache

import numpy as np
import pandas as pd

import cohortflow as cf

STATES = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])


def history(periods=30, joining=40, seed=5):
    """customer, period, state; who leaves is drawn by a rate with luck shared by all in a period."""
    rng = np.random.default_rng(seed)
    rows, there, number = [], [], 0
    for t in range(periods):
        leave = 0.08 * np.exp(0.25 * rng.standard_normal())
        stay = rng.random(len(there)) >= leave
        rows += [(who, t, "steady" if kept else "left") for who, kept in zip(there, stay, strict=True)]
        there = [who for who, kept in zip(there, stay, strict=True) if kept]
        new = [f"c{number + i}" for i in range(rng.poisson(joining))]
        number += len(new)
        rows += [(who, t, "fresh") for who in new]
        there += new
    frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    return frame.assign(period=cf.Calendar("month").labels(frame["period"].to_numpy() + 24 * 12 + 12 * 30))


@cache
def tally():
    return cf.count(cf.read_history(history(), STATES, calendar="month"))


@cache
def past_record(models=("plain", "recent")):
    return cf.backtest(tally(), models=models, horizon=5, origins=9, draws=60, joiners="constant")
