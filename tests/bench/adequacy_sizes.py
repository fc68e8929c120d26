"""Sizes and powers of the adequacy checks in simulated worlds.

    python -m tests.bench.adequacy_sizes --replications 1000 --workers 2

One line a world and number of customers: the share of p-values at or below .05. Under one homogeneous chain
(and, for the checks that allow for it, under shocks shared by a period) it should be .02 to .09.
Chain, worlds and entry: five states, 13 periods; "shocks": N(0, .3) on the log-odds of moves to D and C,
shared
by a period; "two types": half of the customers sticky, half fragile; "own rows": each customer's rows
Dirichlet(8 p); "trend", "second order": the chain changes half-way, remembers one state more.
"""

from __future__ import annotations

import argparse
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pandas as pd

from cohortflow.assessment.adequacy import adequacy
from cohortflow.periods import Calendar
from cohortflow.states import States
from tests.bench import worlds

STATES = States(["N", "R", "L", "D", "C"], exits=["C"], entries=["N"])
P = np.array(
    [
        [0.00, 0.50, 0.05, 0.30, 0.15],
        [0.00, 0.72, 0.10, 0.14, 0.04],
        [0.00, 0.10, 0.85, 0.04, 0.01],
        [0.00, 0.15, 0.01, 0.64, 0.20],
        [0.00, 0.00, 0.00, 0.00, 1.00],
    ]
)
PERIODS = 13
WORLDS = ("markov", "shocks", "two types", "own rows", "trend", "second order")


def tilted(base, shock):
    """Rows with the log-odds of D and C shifted by `shock`."""
    weight = base.copy()
    weight[:4, 3:] *= np.exp(shock)
    return weight / weight.sum(axis=1, keepdims=True)


def panel(world: str, n: int, rng: np.random.Generator, periods: int = PERIODS) -> np.ndarray:
    """(n, periods) states; half of the customers are there from the start, the others join later."""
    entry = np.where(rng.random(n) < 0.5, 0, rng.integers(1, periods // 2, n))
    start = np.zeros(n, dtype=int)
    if world == "shocks":
        law = np.stack([tilted(P, z) for z in rng.normal(0, 0.3, periods - 1)])
        return worlds.simulate(law, start, periods, rng, entry=entry)
    if world == "two types":
        law = np.stack([tilted(P, -0.8), tilted(P, 0.8)])[rng.integers(0, 2, n)]
    elif world == "own rows":
        law = np.zeros((n, 5, 5))
        law[:, 4, 4] = 1.0
        for row in range(4):
            law[:, row, P[row] > 0] = rng.dirichlet(8 * P[row][P[row] > 0], n)
    elif world == "trend":
        half = (periods - 1) // 2
        law = np.stack([tilted(P, -0.25)] * half + [tilted(P, 0.25)] * (periods - 1 - half))
    elif world == "second order":
        return _second_order(n, rng, entry, periods)
    else:
        law = P
    return worlds.simulate(law, start, periods, rng, entry=entry)


def _second_order(n, rng, entry, periods):
    """Those who were in D a period before are likelier to go to D or C."""
    out = np.full((n, periods), -1)
    before, now = np.full(n, -1), np.full(n, -1)
    tables = np.stack([P, tilted(P, 0.6)]).cumsum(axis=2)
    for t in range(periods):
        moving = np.flatnonzero((now >= 0) & (now < 4))
        law = tables[(before[moving] == 3).astype(int), now[moving]]
        after = (rng.random(len(moving))[:, None] > law[:, :-1]).sum(axis=1)
        gone = now == 4
        before, now = now.copy(), now.copy()
        now[moving], now[gone] = after, -2
        now[entry == t] = 0
        out[:, t] = np.where(now >= 0, now, -1)
    return out


def p_values(job: tuple[str, int, int, int, str]) -> dict[str, float]:
    """p-values of one simulated world, by check and code."""
    world, n, seed, replications, calendar = job
    rng = np.random.default_rng([seed, n, WORLDS.index(world)])
    periods = PERIODS if calendar == "step" else 25
    segment = rng.integers(0, 2, n)
    tally = worlds.panel_tally(
        panel(world, n, rng, periods), STATES, segment=segment, calendar=Calendar(calendar)
    )
    found = adequacy(tally, horizon=6, rng=rng, replications=replications, effects=False).to_frame()
    return dict(zip(found["check"] + " " + found["what"], found["p_value"], strict=True))


def study(jobs: list[tuple[str, int, int, int, str]], workers: int) -> pd.DataFrame:
    """Share of p-values at or below .05 by world and number of customers, one column a check."""
    if workers > 1:
        with ProcessPoolExecutor(workers) as pool:
            found = list(pool.map(p_values, jobs, chunksize=8))
    else:
        found = [p_values(j) for j in jobs]
    frame = pd.DataFrame(found)
    world = pd.MultiIndex.from_tuples(
        [(j[0], j[4], j[1]) for j in jobs], names=["world", "calendar", "customers"]
    )
    hits = frame.le(0.05).where(frame.notna()).astype(float)
    return hits.set_axis(world).groupby(level=[0, 1, 2], sort=False).mean()


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replications", type=int, default=1000)
    parser.add_argument("--draws", type=int, default=99, help="random tables and panels behind each p-value")
    parser.add_argument("--customers", type=int, nargs="+", default=[60, 200, 1000])
    parser.add_argument("--worlds", nargs="+", default=list(WORLDS), choices=WORLDS)
    parser.add_argument("--calendar", default="step", choices=["step", "quarter", "month"])
    parser.add_argument("--workers", type=int, default=2)
    asked = parser.parse_args()
    parts = []
    for world in asked.worlds:
        for n in asked.customers:
            jobs = [(world, n, seed, asked.draws, asked.calendar) for seed in range(asked.replications)]
            parts.append(study(jobs, asked.workers))
            print(parts[-1].round(3).to_csv(header=len(parts) == 1), end="", flush=True)
    with pd.option_context("display.width", 200, "display.max_columns", 30):
        print(pd.concat(parts).T.round(3).to_string())


if __name__ == "__main__":
    main()
