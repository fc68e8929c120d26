"""How long the models take, and whether latent types find what is there.

python -m tests.bench.models times         every model on 1,000,000 customers already counted, 8 states
python -m tests.bench.models generator     analytic against numerical gradient on 20,000 sightings
python -m tests.bench.models types         50 data sets of two types and 50 of one: far retention, coverage
"""

from __future__ import annotations

import argparse
import time

import numpy as np
import pandas as pd
from scipy.linalg import expm
from scipy.optimize import minimize

from cohortflow.estimator import fit, future_rates, generator_from_panel
from cohortflow.estimator.panel import Panel
from cohortflow.projector import project, retention
from cohortflow.states import States
from cohortflow.tally import Tally
from tests.bench.coverage import spread_over_cores
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate

EIGHT = States(
    ["left", "lapsed", "paused", "new", "weekly", "fortnightly", "monthly", "quiet"],
    exits=["left", "lapsed"],
    entries=["new"],
    away=["paused"],
)

STICKY = np.array(
    [
        [0, 0.60, 0.05, 0.30, 0.05],
        [0, 0.80, 0.08, 0.11, 0.01],
        [0, 0.08, 0.90, 0.02, 0.00],
        [0, 0.20, 0.02, 0.70, 0.08],
        [0, 0, 0, 0, 1],
    ]
)
FRAGILE = np.array(
    [
        [0, 0.40, 0.05, 0.30, 0.25],
        [0, 0.60, 0.12, 0.18, 0.10],
        [0, 0.15, 0.70, 0.10, 0.05],
        [0, 0.10, 0.00, 0.55, 0.35],
        [0, 0, 0, 0, 1],
    ]
)


def big_tally(customers=1_000_000, block=100_000, periods=37, seed=1):
    """Two types of customers in 8 states, joined over time, in 128 buckets; paths of 200,000."""
    rng = np.random.default_rng(seed)
    chains = []
    for stay in (8.0, 3.0):
        P = rng.dirichlet(np.full(8, 0.6), size=8) + stay / 8 * np.eye(8)
        P[:, :2] *= 0.15 if stay > 5 else 0.5
        P[:2] = np.eye(8)[:2]
        P[2:, 3] = 0.0
        chains.append(P / P.sum(axis=1, keepdims=True))
    total = None
    for k in range(customers // block):
        entry = np.where(rng.random(block) < 0.3, 0, rng.integers(0, periods - 1, block))
        half = block // 2
        new = np.full(half, 3)
        panel = np.vstack(
            [
                simulate(P, new, periods, rng, entry=entry[i * half : (i + 1) * half])
                for i, P in enumerate(chains)
            ]
        )
        part = panel_tally(
            panel, EIGHT, buckets=128, segment=rng.integers(0, 3, block), calendar="month", first=600
        )
        if k >= 2:
            part = Tally.build(part.meta, {n: t for n, t in part.tables.items() if n != "paths"})
        total = part if total is None else _merged(total, part)
    return total


def _merged(a, b):
    tables = {n: pd.concat([a.tables[n], b.tables[n]], ignore_index=True) for n in a.tables}
    return Tally.build(a.meta, tables)


def times(customers=1_000_000):
    """Seconds of fit, of 500 draws with shocks, and of the projection with its bands (24 periods)."""
    tally = big_tally(customers)
    print(tally, {n: len(t) for n, t in tally.tables.items() if len(t)})
    rows = []
    models = [
        "plain",
        "recent",
        "seasonal",
        "tenure",
        "time_in_state",
        "segment",
        "second_order",
        "mover_stayer",
    ]
    for model in [*models, "mixture 3"]:
        options = {"by": "group"} if model == "segment" else {"types": 3} if model == "mixture 3" else {}
        clock = [time.perf_counter()]
        f = fit(tally, model=model.split()[0], **options)
        clock.append(time.perf_counter())
        shocks = future_rates(f, 24, 500, rng=1)
        clock.append(time.perf_counter())
        project(f, periods=24, shocks=shocks, draws=500)
        clock.append(time.perf_counter())
        rows.append(
            (model, *np.diff(clock), f.settings.get("expanded_states", 8), f.settings.get("converged", ""))
        )
        print(*rows[-1], flush=True)
    return pd.DataFrame(rows, columns=["model", "fit", "shocks", "project", "states", "converged"])


def generator_race(rows=20_000, seed=1):
    """Seconds by the analytic gradient, and by numerical gradients of the same likelihood by (from, to, gap)."""
    names = States(["new", "on", "quiet", "off"], exits=["off"])
    Q = np.array([[-0.5, 0.35, 0.1, 0.05], [0, -0.3, 0.25, 0.05], [0, 0.4, -0.6, 0.2], [0, 0, 0, 0]])
    rng = np.random.default_rng(seed)
    gaps = rng.integers(1, 61, rows) / 10
    origin = rng.integers(0, 3, rows)
    P = {g: expm(Q * g) for g in np.unique(gaps)}
    target = [int(rng.choice(4, p=P[g][i])) for g, i in zip(gaps, origin, strict=True)]
    label = np.array(names.names, dtype=object)
    frame = pd.DataFrame({"from": label[origin], "to": label[target], "gap": gaps})
    clock = time.perf_counter()
    found = generator_from_panel(frame, names, moves=Q > 0)
    ours = time.perf_counter() - clock
    panel, cells = Panel.of_frame(frame, names), np.nonzero(Q > 0)

    def loss(x):
        G = np.zeros((4, 4))
        G[cells] = np.exp(x)
        np.fill_diagonal(G, -G.sum(axis=1))
        moved = expm(G[None] * panel.gaps[:, None, None])
        return -float((panel.counts * np.log(np.maximum(moved, 1e-300))).sum()) / rows

    clock = time.perf_counter()
    numerical = minimize(loss, np.log(panel.crude(Q > 0)[cells]), method="BFGS")
    theirs = time.perf_counter() - clock
    gap = found.settings["log_likelihood"] + numerical.fun * rows
    print(
        f"analytic {ours:.2f} s, numerical {theirs:.2f} s, ratio {theirs / ours:.1f}; log-likelihood {gap:+.2e}; "
        f"largest error {np.abs(found.Q - Q).max():.3f}; converged {found.settings['converged']}"
    )
    return ours, theirs, gap


def types_replication(task):
    """Truth, plain, mixture (number chosen) at 48 periods, types, and the mixture's 90 % limits from draws."""
    two, customers, seed = task
    rng = np.random.default_rng([seed, customers])
    half = customers // 2
    laws = (STICKY, FRAGILE) if two else (CHAIN, CHAIN)
    panel = np.vstack([simulate(P, np.zeros(half, int), 13, rng) for P in laws])
    tally = panel_tally(np.pad(panel, ((0, 0), (1, 0)), constant_values=-1), STATES)  # all join in period 1
    truth = np.mean([np.linalg.matrix_power(P, 48)[0, :4].sum() for P in laws])
    plain = retention(fit(tally), start={"N": 1}, periods=48)
    found = fit(tally, model="mixture")
    curve = retention(found, start={"N": 1}, periods=48, draws=400)
    return truth, plain.model[-1], curve.model[-1], found.settings["types"], curve.low[-1], curve.high[-1]


def types(replications=50, customers=5000, cores=None):
    """Mean absolute error of 48-period retention, plain against mixture, on two types and on one."""
    for two in (True, False):
        found = np.array(
            spread_over_cores(types_replication, [(two, customers, s) for s in range(replications)], cores)
        )
        truth, plain, mixed, number, low, high = found.T
        errors = [np.abs(v - truth).mean() for v in (plain, mixed)]
        inside = ((low <= truth) & (truth <= high)).mean()
        print(
            f"{'two types' if two else 'one type'}: truth {truth[0]:.4f}, mean error plain {errors[0]:.4f}, "
            f"mixture {errors[1]:.4f}, ratio {errors[1] / errors[0]:.2f}; types chosen "
            f"{np.bincount(number.astype(int))[1:].tolist()}; limits hold the truth {inside:.2f}",
            flush=True,
        )


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("what", nargs="+", choices=["times", "generator", "types"])
    parser.add_argument("--cores", type=int)
    options = parser.parse_args()
    if "generator" in options.what:
        generator_race()
    if "types" in options.what:
        types(cores=options.cores)
    if "times" in options.what:
        times()


if __name__ == "__main__":
    main()
