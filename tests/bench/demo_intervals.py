"""Do the intervals of the demo's rates hold the truth? Run: python tests/bench/demo_intervals.py [seeds]

Truth: the pooled rates of a million generated members over the same 36 months, shocks switched off (members
differ, seasons stay). Then 9,000 members a seed, read and counted by the public calls, and the share of the
intervals of all possible moves that hold the truth. Printed for ordinary Wilson intervals (each move of one
customer taken as independent) and for those on the effective number (customer-robust).
"""

from __future__ import annotations

import sys
from multiprocessing import Pool
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).parents[2]))

import cohortflow as cf
from demo_data.members import STATES, state_history

EXITS = ["cancelled", "card_lapsed"]
IMPOSSIBLE = [("paused", "card_lapsed"), ("taster", "card_lapsed"), ("weekly", "card_lapsed"),
              ("fortnightly", "card_lapsed")]  # fmt: skip
LEVELS = (0.90, 0.95)


def counted(members: int, seed: int, first_customer: int = 0) -> cf.Tally:
    history = state_history(members, seed=seed, shocks=False, first_customer=first_customer)
    rows = pd.DataFrame(
        {
            "customer": history.customer,
            "period": history.period,
            "state": np.array(STATES, dtype=object)[history.state],
        }
    )
    back_to = [(s, "taster") for s in ("paused", "quiet", "weekly", "fortnightly")]
    states = cf.States(
        STATES, exits=EXITS, entries=["taster"], away=["paused"], impossible=IMPOSSIBLE + back_to
    )
    return cf.count(cf.read_history(rows, states))


def truth(pieces: int = 10) -> np.ndarray:
    tallies = [counted(100_000, seed=900 + i, first_customer=i * 100_000) for i in range(pieces)]
    return cf.fit(sum(tallies[1:], start=tallies[0])).P


def held(args: tuple[int, np.ndarray]) -> dict[tuple[float, str], np.ndarray]:
    seed, rates = args
    fit = cf.fit(counted(9_000, seed=seed))
    inside = {}
    for level in LEVELS:
        for name, clustered in (("ordinary", False), ("customer-robust", True)):
            frame = fit.interval(level=level, clustered=clustered).to_frame()
            possible = fit.states.allowed & ~fit.states.exit_mask[:, None]
            low, high = (_matrix(frame, fit.states, column)[possible] for column in ("low", "high"))
            inside[level, name] = (low <= rates[possible]) & (rates[possible] <= high)
    return inside


def _matrix(frame: pd.DataFrame, states: cf.States, column: str) -> np.ndarray:
    wide = frame.pivot(index="from", columns="to", values=column)
    return wide.reindex(index=list(states.names), columns=list(states.names)).to_numpy(dtype=float)


def coverage(seeds: int, pieces: int = 10) -> pd.DataFrame:
    rates = truth(pieces)
    with Pool(2) as pool:
        runs = pool.map(held, [(seed, rates) for seed in range(seeds)], chunksize=5)
    rows = []
    for level, name in runs[0]:
        hits = np.array([run[level, name] for run in runs])
        rows.append(
            {
                "level": level,
                "interval": name,
                "share held": hits.mean(),
                "worst move": hits.mean(axis=0).min(),
                "moves": hits.shape[1],
                "seeds": seeds,
            }
        )
    return pd.DataFrame(rows)


if __name__ == "__main__":
    print(coverage(int(sys.argv[1]) if len(sys.argv) > 1 else 200).round(4).to_string(index=False))
