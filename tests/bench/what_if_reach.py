"""How fast what-ifs are: levers of 300 states against one LU factor, paired draws against a plain loop.

    python -m tests.bench.what_if_reach

The reach asked for: all slopes of a long-run target of 300 states within 3 times a bare LU factor of the same
matrix; 2,000 paired draws of a scenario over 24 periods at least 50 times faster than a plain loop. Both are the
best of several runs, with one BLAS thread.
"""

from __future__ import annotations

import os
import time

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np  # noqa: E402
from scipy.linalg import lu_factor  # noqa: E402

import cohortflow as cf  # noqa: E402
from cohortflow.projector.money import money_terms  # noqa: E402

STATES, DRAWS, PERIODS = 300, 2000, 24


def best(run, times):
    taken = []
    for _ in range(times):
        begun = time.perf_counter()
        run()
        taken.append(time.perf_counter() - begun)
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
    """Seconds of a plain loop over those of `what_if`, for the same draws, and the largest difference."""
    states = cf.States(
        ["fresh", "steady", "often", "quiet", "paused", "left", "lapsed"], exits=["left", "lapsed"], away=["paused"]
    )
    rng = np.random.default_rng(2)
    P = rng.dirichlet(np.ones(7), 7)
    P[5:] = np.eye(7)[5:]
    drawn = np.stack([[rng.dirichlet(400 * row) if row.max() < 1 else row for row in P] for _ in range(DRAWS)])
    chain = cf.Chain(states, P)
    record = cf.Draws.of_matrices(chain.schedule, [drawn[:, None]])
    start, joiners = np.array([50.0, 900, 300, 120, 60, 0, 0]), np.array([40.0, 0, 0, 0, 0, 0, 0])
    money = {"per_period": {"steady": 20.0, "often": 30.0}, "discount_rate": 0.08}
    plan = cf.Scenario("call", [cf.Change("quiet", "steady", add=0.03)], starts=3, cost_per_customer=1.2)
    coming = cf.planned_numbers(states, joiners, periods=PERIODS) if hasattr(cf, "planned_numbers") else joiners
    asked = {"periods": PERIODS, "start": start, "value": money, "draws": record, "joiners": None}
    ours = best(lambda: cf.what_if(chain, plan, **asked), 7)
    found = cf.what_if(chain, plan, **asked)
    del coming
    terms = money_terms(states, money["per_period"], discount_rate=0.08, periods_a_year=12)
    begun = time.perf_counter()
    nets, lives = plain_loop(drawn, start, terms, plan)
    loop = time.perf_counter() - begun
    low, high = np.quantile(nets, [0.05, 0.95])
    gap = max(abs(low - found.total["net"].low), abs(high - found.total["net"].high))
    gap = max(gap, np.abs(np.quantile(lives, 0.05, axis=0) - found.by_period["all_live"].low).max())
    print(f"plain loop {loop:.2f} s, what_if {1e3 * ours:.1f} ms: {loop / ours:.0f} times (at least 50); "
          f"limits differ by {gap:.1e}")  # fmt: skip
    return loop / ours


def plain_loop(drawn, start, terms, plan):
    """The same paired scenario, draw by draw and period by period."""
    quiet, steady, live = 3, 1, [0, 1, 2, 3]
    amounts = terms.amounts()
    nets, lives = [], []
    for P in drawn:
        Q = P.copy()
        d = min(0.03, 1 - P[quiet, steady])
        Q[quiet] = P[quiet] * (1 - d / (1 - P[quiet, steady]))
        Q[quiet, steady] = P[quiet, steady] + d
        x, y, net, ahead = start, start, 0.0, []
        for h in range(PERIODS):
            M = Q if h >= 2 else P
            factor = terms.factor ** (h + terms.lag)
            paid = (x[:, None] * P * amounts).sum()
            more = (y[:, None] * M * amounts).sum()
            cost = plan.cost_per_customer * y[quiet] if h >= 2 else 0.0
            net += factor * (more - paid - cost)
            x, y = x @ P, y @ M
            ahead.append((y - x)[live].sum())
        nets.append(net)
        lives.append(ahead)
    return np.array(nets), np.array(lives)


if __name__ == "__main__":
    levers()
    draws()
