"""Simulated worlds for the tests of the assessment room, small enough to run in a moment."""

import numpy as np
import pandas as pd

from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import Tally
from tests.bench.adequacy_sizes import STATES, P, panel
from tests.bench.worlds import panel_tally, simulate

__all__ = ["P", "STATES", "full_tally", "monthly", "tally_of", "two_states", "world"]

FIRST = 600  # 2020-01


def world(name, customers=400, *, seed=1, periods=13, calendar="step", segments=False):
    """Tally of one of the worlds of tests/bench/adequacy_sizes.py."""
    rng = np.random.default_rng(seed)
    segment = rng.integers(0, 2, customers) if segments else None
    grid = panel(name, customers, rng, periods)
    return panel_tally(grid, STATES, segment=segment, calendar=Calendar(calendar))


def tally_of(lines, names=("a", "b", "left"), exits=("left",), **more):
    """Tally of customers written as texts of state numbers, one a period, "." where there is no row."""
    grid = np.array([[-1 if c == "." else int(c) for c in line] for line in lines])
    return full_tally(grid, States(list(names), exits=list(exits)), **more)


def two_states(p_leave, customers, periods, rng, **more):
    """Tally of customers who stay or leave; p_leave a number, (periods - 1,) or (customers,)."""
    p = np.asarray(p_leave, dtype=float)
    law = np.zeros((*p.shape, 2, 2))
    law[..., 0, 0], law[..., 0, 1], law[..., 1, 1] = 1 - p, p, 1.0
    grid = simulate(law, np.zeros(customers, dtype=int), periods, rng)
    return panel_tally(grid, States(["here", "gone"], exits=["gone"]), **more)


def full_tally(grid, states, **more):
    """panel_tally with the table `steps` as well (customers of one stay each)."""
    tally = panel_tally(grid, states, **more)
    if "steps" in tally.meta.tables or not more.get("full", True):
        return tally
    first = more.get("first", 0)
    held = grid.copy()
    for t in range(1, grid.shape[1]):
        left = states.exit_mask[np.maximum(held[:, t - 1], 0)] & (held[:, t - 1] >= 0)
        held[left, t] = held[left, t - 1]
    rows = []
    for k in range(1, min(12, grid.shape[1] - 1) + 1):
        c, t = np.nonzero(
            (grid[:, :-k] >= 0) & ~states.exit_mask[np.maximum(grid[:, :-k], 0)] & (held[:, k:] >= 0)
        )
        rows.append(pd.DataFrame({"period": t + first, "k": k, "state": grid[c, t], "later": held[c, t + k]}))
    steps = pd.concat(rows).assign(segment=0, n=1)
    meta = tally.meta.__class__(**{**vars(tally.meta), "tables": (*tally.meta.tables, "steps")})
    return Tally.build(meta, {**tally.tables, "steps": steps})


def monthly(customers=1500, *, seed=1, periods=30, start=0.4):
    """Monthly tally from 2020-01 with joiners in every month; a share `start` is there from the first."""
    rng = np.random.default_rng(seed)
    entry = np.where(rng.random(customers) < start, 0, rng.integers(1, periods, customers))
    grid = simulate(P, np.zeros(customers, dtype=int), periods, rng, entry=entry)
    return full_tally(grid, STATES, calendar="month", first=FIRST, buckets=64)
