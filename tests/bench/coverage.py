"""Do the intervals and bands hold what they promise? A simulation study with known truth.

    python -m tests.bench.coverage                 every bar in full, on all cores (about an hour on two)
    python -m tests.bench.coverage --bars 1 3 --replications 200

Worlds: one chain for everybody; customers who each have rows of their own; months that share their luck. The
bars are printed beside the figures. tests/test_coverage.py runs a small version of it.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os

import numpy as np
import pandas as pd

from cohortflow.estimator import fit, future_rates
from cohortflow.estimator.covariance import covariance
from cohortflow.estimator.interval import goodman, row_limits
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.transitions import intervals
from cohortflow.projector import joiner_forecast, long_run, project, retention, time_to_exit
from tests.bench.worlds import (
    CHAIN,
    STATES,
    autoregression,
    cube_tally,
    panel_tally,
    settled,
    shocked_rates,
    simulate,
    walk_counts,
)

LIVE = STATES.live_mask
HORIZONS = (1, 3, 6, 12)
SHOCK_WORLDS = {
    "none": (0.0, 0.0, 0.0),
    "cells": (0.0, 0.2, 0.0),
    "cells .6": (0.0, 0.2, 0.6),
    "exits": (0.2, 0.0, 0.0),
    "exits .6": (0.2, 0.0, 0.6),
    "both": (0.2, 0.2, 0.0),
    "both .6": (0.2, 0.2, 0.6),
}


# ---- bars 1 and 2: cells ----
def cells_markov(customers, replications, seed):
    """(method -> coverage of every cell with an expected count of 5), and whole rows by Goodman."""
    rng = np.random.default_rng(seed)
    now = np.zeros((replications, 5), dtype=int)
    now[:, 0] = customers
    counts = np.zeros((replications, 5, 5), dtype=int)
    for _ in range(12):
        moved = rng.multinomial(now, CHAIN)
        moved[:, 4] = 0
        counts += moved
        now = moved.sum(axis=1)
    return _cell_table(counts, CHAIN)


def _cell_table(counts, P):
    usual = counts[:, :4].mean(axis=0) >= 5
    out = {}
    for method in ("wilson", "clopper-pearson"):
        low, high = row_limits(counts[:, :4], method=method)
        out[method] = ((low <= P[:4]) & (P[:4] <= high)).mean(axis=0)[usual]
    allowed = np.broadcast_to(P[:4] > 0, counts[:, :4].shape)
    low, high = goodman(counts[:, :4], allowed=allowed)
    out["goodman rows"] = ((low <= P[:4]) & (P[:4] <= high)).all(axis=2).mean(axis=0)
    return out


def own_rows(customers, rng, concentration=8.0):
    """(C, K, K) each customer's rows, Dirichlet(8 p)."""
    weights = rng.gamma(np.broadcast_to(concentration * CHAIN, (customers, 5, 5)) + 1e-300)
    return weights / weights.sum(axis=2, keepdims=True)


def panel_rows(panel):
    """RowCounts of a panel, one bucket a customer."""
    c, t = np.nonzero((panel[:, :-1] >= 0) & (panel[:, 1:] >= 0))
    table = pd.DataFrame({"row": panel[c, t], "column": panel[c, t + 1], "bucket": c, "period": t, "n": 1})
    return RowCounts.of_table(table, STATES.allowed, np.ones(len(table)))


def pooled_limit(seed=99, customers=2_000_000, parts=20):
    """The rates that the pooled estimator tends to when customers have rows of their own."""
    rng = np.random.default_rng(seed)
    total = np.zeros((5, 5))
    part = customers // parts
    for _ in range(parts):
        total += panel_rows(simulate(own_rows(part, rng), np.zeros(part, int), 13, rng)).N
    P = CHAIN.copy()
    P[:4] = total[:4] / total[:4].sum(axis=1, keepdims=True)
    return P


def cells_own_rows(task):
    """Inside or not, and expected counts, of one replication with the effective number."""
    customers, seed, P = task
    rng = np.random.default_rng(seed)
    rows = panel_rows(simulate(own_rows(customers, rng), np.zeros(customers, int), 13, rng))
    robust = covariance(rows, "customer")
    frame = intervals(rows, STATES, level=0.95, method="wilson", robust=robust, segment="all")
    low, high = (frame[side].to_numpy().reshape(5, 5)[:4] for side in ("low", "high"))
    return (low <= P[:4]) & (P[:4] <= high), rows.N[:4]


def cells_table(replications, cores=None, sizes=(50, 200, 1000)):
    """Bars 1 and 2: coverage of cells; least and mean of each method, world and size."""
    rows = []
    for customers in sizes:
        for method, inside in cells_markov(customers, replications, seed=customers).items():
            rows.append(("Markov", customers, method, inside.min(), inside.mean()))
    limit = pooled_limit()
    for customers in (200, 1000):
        tasks = [(customers, seed, limit) for seed in range(max(replications, 2000))]
        found = spread_over_cores(cells_own_rows, tasks, cores)
        usual = np.mean([counts for _, counts in found], axis=0) >= 5
        inside = np.mean([hit for hit, _ in found], axis=0)[usual]
        rows.append(("own rows", customers, "wilson, effective n", inside.min(), inside.mean()))
    return pd.DataFrame(rows, columns=["world", "customers", "method", "least", "mean"])


# ---- bars 3 and 4: derived quantities ----
QUANTITIES = ("active share at 12", "mean time to exit", "survivors in R")


def truths(P):
    """The three quantities of a matrix, by plain linear algebra."""
    Q = P[:4, :4]
    values, vectors = np.linalg.eig(Q[1:, 1:].T)
    mix = np.abs(vectors[:, values.real.argmax()].real)
    share = np.linalg.matrix_power(P, 12)[0, :4].sum()
    return np.array([share, np.linalg.inv(np.eye(4) - Q)[0].sum(), mix[0] / mix.sum()])


def derived(fitted, kind, level=0.95):
    """(3, 2) limits of the quantities through the public calls; NaN where one does not exist."""
    curve = retention(fitted, start={"N": 1}, periods=12, level=level, covariance=kind)
    exits = time_to_exit(fitted, level=level, covariance=kind).to_frame()
    settled_mix = long_run(fitted, level=level, covariance=kind).to_frame()
    life = exits[(exits["measure"] == "mean_time") & (exits["from"] == "N")]
    mix = settled_mix[(settled_mix["measure"] == "remaining_mix") & (settled_mix["state"] == "R")]
    pairs = [(curve.low[-1], curve.high[-1]), *(tuple(t[["low", "high"]].iloc[0]) for t in (life, mix))]
    return np.array(pairs, dtype=float)


def derived_replication(task):
    """(3,) inside or not, NaN where no limits exist."""
    world, customers, seed, truth = task
    rng = np.random.default_rng([seed, customers])
    start = np.zeros(customers, int)
    if world == "shocks":
        f = 0.3 * rng.standard_normal(12)
        hit = STATES.mask(["D", "C"])
        rates = shocked_rates(CHAIN, hit, f, np.zeros((12, 5, 5)))
        panel = simulate(rates, start, 13, rng, entry=rng.integers(0, 12, customers))
    else:
        panel = simulate(own_rows(customers, rng) if world == "own rows" else CHAIN, start, 13, rng)
    fitted = fit(panel_tally(panel, STATES, full=False))
    limits = derived(fitted, "two_way" if world == "shocks" else "customer")
    inside = (limits[:, 0] <= truth) & (truth <= limits[:, 1])
    return np.where(np.isnan(limits).any(axis=1), np.nan, inside)


def shocked_limit(draws=400_000, seed=7):
    """The rates that pooling over many months with shocks tends to: their mean."""
    f = 0.3 * np.random.default_rng(seed).standard_normal(draws)
    hit = STATES.mask(["D", "C"])
    parts = [
        shocked_rates(CHAIN, hit, part, np.zeros((len(part), 5, 5))).mean(axis=0) for part in np.split(f, 20)
    ]
    return np.mean(parts, axis=0)


def derived_table(replications, cores=None):
    """Bars 3 and 4: coverage of derived quantities by world and size."""
    limits = {"Markov": CHAIN, "own rows": pooled_limit(), "shocks": shocked_limit()}
    rows = []
    for world, sizes in (
        ("Markov", (50, 200, 1000)),
        ("own rows", (50, 200, 1000)),
        ("shocks", (200, 1000, 5000)),
    ):
        for customers in sizes:
            tasks = [(world, customers, seed, truths(limits[world])) for seed in range(replications)]
            found = np.array(spread_over_cores(derived_replication, tasks, cores), dtype=float)
            rows.append((world, customers, *np.nanmean(found, axis=0), float(np.isnan(found).mean())))
            print(*rows[-1], flush=True)
    return pd.DataFrame(rows, columns=["world", "customers", *QUANTITIES, "without limits"])


# ---- bar 6: predictive bands of the live base ----
def band_replication(task):
    """(4,) inside or not, (4,) width over the oracle's, at the horizons, for one simulated base."""
    world, customers, seed, draws = task
    exit_sd, cell_sd, persistence = SHOCK_WORLDS[world]
    rng = np.random.default_rng([seed, customers, list(SHOCK_WORLDS).index(world)])
    past, ahead = 30, max(HORIZONS)
    shared = autoregression(rng, past + ahead, exit_sd, persistence)
    own = autoregression(rng, past + ahead, cell_sd, persistence, (5, 5))
    rates = shocked_rates(CHAIN, STATES.exit_mask, shared, own)
    mix, joining = settled(CHAIN, STATES.exit_mask, customers)
    cube, now = walk_counts(rates[:past], mix, joining, rng)
    coming, end = walk_counts(rates[past:], now, joining, rng)
    actual = np.append(coming.sum(axis=2)[1:, LIVE].sum(axis=1), end[LIVE].sum())
    counts = cube_tally(cube, STATES, now=now)
    fitted = fit(counts)
    shocks = future_rates(fitted, ahead, draws, rng=seed)
    joiners = joiner_forecast(counts, ahead, method="constant")
    frame = project(fitted, periods=ahead, joiners=joiners, shocks=shocks, draws=draws, rng=seed).to_frame()
    band = frame[frame["state"] == "all_live"].set_index("periods_ahead").loc[list(HORIZONS)]
    at = np.array(HORIZONS) - 1
    inside = (band["low"].to_numpy() <= actual[at]) & (actual[at] <= band["high"].to_numpy())
    law = (exit_sd, cell_sd, persistence)
    knowing = oracle_width(now, joining, law, shared[past - 1], own[past - 1], rng, draws)
    return inside, (band["high"] - band["low"]).to_numpy() / knowing


def oracle_width(now, joining, law, shared, own, rng, draws):
    """(4,) widths of 90 % bands of somebody who knows the law and where the shocks stand."""
    exit_sd, cell_sd, persistence = law
    live = np.empty((draws, len(HORIZONS)))
    base = np.tile(now, (draws, 1))
    f, e = np.full(draws, shared), np.tile(own, (draws, 1, 1))
    spread = np.sqrt(1 - persistence**2)
    for h in range(1, max(HORIZONS) + 1):
        f = persistence * f + spread * exit_sd * rng.standard_normal(draws)
        e = persistence * e + spread * cell_sd * rng.standard_normal(e.shape)
        P = shocked_rates(CHAIN, STATES.exit_mask, f, e)
        base = rng.multinomial(base, P).sum(axis=1)
        base[:, 4] = 0
        base[:, 0] += rng.poisson(joining, draws)
        if h in HORIZONS:
            live[:, HORIZONS.index(h)] = base[:, LIVE].sum(axis=1)
    low, high = np.quantile(live, [0.05, 0.95], axis=0)
    return high - low


def bands(replications, *, sizes=(2_000, 50_000), worlds=tuple(SHOCK_WORLDS), draws=500, cores=None):
    """Table: world, customers, coverage at 1, 3, 6, 12 and mean width over the oracle's."""
    rows = []
    for world in worlds:
        for customers in sizes:
            tasks = [(world, customers, s, draws) for s in range(replications)]
            found = spread_over_cores(band_replication, tasks, cores)
            inside, width = (np.mean([f[k] for f in found], axis=0) for k in (0, 1))
            named = {f"h{h}": c for h, c in zip(HORIZONS, inside, strict=True)}
            widths = {f"width{h}": w for h, w in zip(HORIZONS, width, strict=True)}
            rows.append({"world": world, "customers": customers, **named, **widths})
            print(pd.DataFrame(rows[-1:]).round(3).to_string(index=False, header=len(rows) == 1), flush=True)
    return pd.DataFrame(rows)


def spread_over_cores(job, tasks, cores=None):
    """job of every task, in order, on several processes."""
    cores = cores or os.cpu_count()
    if cores == 1:
        return [job(task) for task in tasks]
    with multiprocessing.get_context("spawn").Pool(cores) as pool:
        return pool.map(job, tasks, chunksize=max(1, len(tasks) // (8 * cores)))


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument(
        "--bars", nargs="*", type=int, default=[1, 3, 6], help="1 also makes 2, 3 also makes 4"
    )
    parser.add_argument("--replications", type=int, default=400)
    parser.add_argument("--cores", type=int)
    options = parser.parse_args()
    if {1, 2} & set(options.bars):
        print(cells_table(max(options.replications, 1000), options.cores).round(3).to_string(index=False))
    if {3, 4} & set(options.bars):
        print(derived_table(options.replications, options.cores).round(3).to_string(index=False))
    if 6 in options.bars:
        bands(options.replications, cores=options.cores)


if __name__ == "__main__":
    main()
