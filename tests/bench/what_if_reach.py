"""How fast what-ifs are: levers of 300 states against one LU factor, paired draws against a plain loop.

    python -m tests.bench.what_if_reach

The reach asked for: all slopes of a long-run target of 300 states within 3 times a bare LU factor of the same
matrix; 2,000 paired draws of a scenario over 24 periods at least 50 times faster than a plain loop. Both are
the best of several runs, in seconds of the processor, with one BLAS thread.
"""

from __future__ import annotations

import os
import time

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.linalg import lu_factor

import cohortflow as cf
from cohortflow.projector.money import money_terms

STATES, DRAWS, PERIODS = 300, 2000, 24


def best(run, times):
    taken = []
    for _ in range(times):
        begun = time.process_time()
        run()
        taken.append(time.process_time() - begun)
    return min(taken)


def levers() -> float:
    """Slopes of the settled base for every move, over the time of one LU factor."""
    rng = np.random.default_rng(1)
    P = rng.random((STATES + 1, STATES + 1))
    P[:, -1] *= 5
    P[-1] = np.eye(STATES + 1)[-1]
    P /= P.sum(axis=1, keepdims=True)
    names = [f"s{k}" for k in range(STATES + 1)]
    chain, joiners = cf.Chain(cf.States(names, exits=names[-1:]), P), rng.random(STATES + 1)
    joiners[-1] = 0
    system = np.eye(STATES) - P[:-1, :-1]
    bare = best(lambda: lu_factor(system), 40)
    ours = best(lambda: cf.sensitivity(chain, target="settled_base", joiners=joiners).slope, 40)
    print(f"bare LU {1e3 * bare:.2f} ms, slopes of all {STATES * (STATES + 1):,} moves {1e3 * ours:.2f} ms: "
          f"{ours / bare:.2f} times (at most 3)")  # fmt: skip
    return ours / bare


def draws() -> float:
    """Seconds of a plain loop over those of `what_if`, for the same draws and figures."""
    states = cf.States(
        ["fresh", "steady", "often", "quiet", "paused", "left", "lapsed"],
        exits=["left", "lapsed"],
        away=["paused"],
    )
    rng = np.random.default_rng(2)
    P = rng.dirichlet(np.ones(7), 7)
    P[5:] = np.eye(7)[5:]
    drawn = np.stack([[rng.dirichlet(400 * r) if r.max() < 1 else r for r in P] for _ in range(DRAWS)])
    chain = cf.Chain(states, P)
    record = cf.Draws.of_matrices(chain.schedule, [drawn[:, None]])
    start = np.array([50.0, 900, 300, 120, 60, 0, 0])
    money = {"per_period": {"steady": 20.0, "often": 30.0}, "discount_rate": 0.08}
    plan = cf.Scenario("call", [cf.Change("quiet", "steady", add=0.03)], starts=3, cost_per_customer=1.2)
    asked = {"periods": PERIODS, "start": start, "value": money, "draws": record}
    ours = best(lambda: cf.what_if(chain, plan, **asked), 15)
    found = cf.what_if(chain, plan, **asked)
    table = best(lambda: cf.what_if(chain, plan, **asked).to_frame(), 5)
    terms = money_terms(states, money["per_period"], discount_rate=0.08, periods_a_year=12)
    limits = {}
    loop = best(lambda: limits.update(plain_loop(drawn, start, terms, plan)), 2)
    gap = max(
        np.abs(np.array([np.asarray(pair.low), np.asarray(pair.high)]) - limits[name]).max()
        for name, pair in [*found.by_period.items(), *((f"total {n}", p) for n, p in found.total.items())]
        if name in limits and np.isfinite(limits[name]).all()
    )
    print(f"plain loop {loop:.2f} s, what_if {1e3 * ours:.1f} ms: {loop / ours:.0f} times (at least 50); with the "
          f"whole table of limits {1e3 * table:.1f} ms; limits differ by {gap:.1e}")  # fmt: skip
    return loop / ours


def plain_loop(drawn, start, terms, plan):
    """The same figures draw by draw and period by period: customers, money, payback, break-even, the long
    run.
    """
    quiet, steady = 3, 1
    amounts = terms.amounts()
    names = [
        "fresh",
        "steady",
        "often",
        "quiet",
        "paused",
        "left",
        "lapsed",
        "all_live",
        "value",
        "cost",
        "net",
    ]
    every = {name: [] for name in names}
    totals = {
        name: [] for name in ("total value", "total cost", "total net", "total break_even_cost", "payback")
    }
    settled = []
    for P in drawn:
        Q = P.copy()
        d = min(0.03, 1 - P[quiet, steady])
        Q[quiet] = P[quiet] * (1 - d / (1 - P[quiet, steady]))
        Q[quiet, steady] = P[quiet, steady] + d
        x, y, ahead, treated = start, start, [], 0.0
        for h in range(PERIODS):
            M = Q if h >= 2 else P
            factor = terms.factor ** (h + terms.lag)
            paid = factor * (x[:, None] * P * amounts).sum()
            more = factor * (y[:, None] * M * amounts).sum()
            treated += factor * y[quiet] * (h >= 2)
            cost = factor * plan.cost_per_customer * y[quiet] * (h >= 2)
            x, y = x @ P, y @ M
            gain = y - x
            ahead.append([*gain, gain[:4].sum(), more - paid, cost, more - paid - cost])
        ahead = np.array(ahead)
        for name, column in zip(names, ahead.T, strict=True):
            every[name].append(column)
        for name, total in zip(
            ("total value", "total cost", "total net"), ahead[:, -3:].sum(axis=0), strict=True
        ):
            totals[name].append(total)
        totals["total break_even_cost"].append(ahead[:, -3].sum() / treated)
        below = np.flatnonzero(ahead[2:, -1].cumsum() < 0)
        totals["payback"].append(below[-1] + 2 if len(below) else 1)
        settled.append(np.linalg.solve(np.eye(5) - Q[:5, :5].T, start[:5]))
    return {name: np.quantile(values, [0.05, 0.95], axis=0) for name, values in (every | totals).items()}


if __name__ == "__main__":
    levers()
    draws()
