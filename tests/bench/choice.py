"""Does the model chosen by backtest forecast better afterwards? Fresh draws of the demo's world.

    python -m tests.bench.choice --seeds 20

For each seed the demo's generator makes 48 months of states. After 36 months a model is chosen from the backtest
of the months known then; the twelve months that follow score it, at origins and horizons that the choice never
saw, beside the plain chain and the rivals (mean relative interval score of `all_live` and of the live customers
of the origin; the plain chain is 1).
"""

from __future__ import annotations

import argparse

import numpy as np
import pandas as pd

import cohortflow as cf
from cohortflow.assessment.backtest import OF_ORIGIN, backtest
from cohortflow.assessment.choice import choose, origin_losses
from cohortflow.assessment.rivals import RIVALS
from cohortflow.tally import Tally
from demo_data.members import STATES, state_history

MODELS = ("plain", "seasonal", "tenure", "second_order", "mixture")
KNOWN, LATER, HORIZON = 36, 12, 6


def tally_of(members: int, seed: int) -> Tally:
    """Months 0 .. 47 of one draw of the demo's world."""
    seen = state_history(members, KNOWN + LATER, seed=seed)
    rows = pd.DataFrame(
        {
            "customer": np.char.add("m", seen.customer.astype(str)),
            "period": seen.period,
            "state": np.array(STATES, dtype=object)[seen.state],
        }
    )
    rows["period"] = (np.datetime64("2023-10", "M") + rows["period"].to_numpy()).astype(str)
    states = cf.States(STATES, exits=["cancelled", "card_lapsed"], entries=["taster"], away=["paused"])
    history = cf.read_history(
        rows, states, customer="customer", period="period", state="state", calendar="month"
    )
    return cf.count(history)


def one(members: int, seed: int, joiners: str, draws: int) -> dict[str, object]:
    """The model chosen for one seed, and everybody's loss afterwards."""
    tally = tally_of(members, seed)
    past = tally.at_origin(tally.meta.first + KNOWN - 1)
    shared = {"horizon": HORIZON, "joiners": joiners, "draws": draws, "rng": seed}
    choice = choose(backtest(past, models=MODELS, origins=12, **shared))
    models = tuple(dict.fromkeys(["plain", choice.model]))
    later = backtest(tally, models=models, origins=LATER - HORIZON + 1, **shared)
    losses = origin_losses(later, ("all_live", OF_ORIGIN), "plain").mean()
    mine = losses[choice.model]
    beaten = {f"beats {name}": bool(mine < losses[name]) for name in RIVALS if name in losses}
    out = {"seed": seed, "chosen": choice.model, "notes": " ".join(choice.notes), "loss": mine}
    return {**out, **losses.drop(choice.model).to_dict(), "beats plain": bool(mine < 1), **beaten}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", type=int, default=20)
    parser.add_argument("--first", type=int, default=1)
    parser.add_argument("--members", type=int, default=9000)
    parser.add_argument(
        "--joiners", default="smoothing", choices=["none", "constant", "last_year", "smoothing"]
    )
    parser.add_argument("--draws", type=int, default=300)
    asked = parser.parse_args()
    rows = []
    for seed in range(asked.first, asked.first + asked.seeds):
        rows.append(one(asked.members, seed, asked.joiners, asked.draws))
        print(rows[-1], flush=True)
    frame = pd.DataFrame(rows)
    wins = frame.filter(like="beats")
    with pd.option_context("display.width", 250, "display.max_columns", 30):
        print(frame.drop(columns=list(wins)).round(3).to_string(index=False))
    print("seeds in which the chosen model beats each:", wins.sum().to_dict())
    at_once = int(wins.fillna(True).all(axis=1).sum())
    print("... and the plain chain and every rival at once:", at_once, "of", len(frame))


if __name__ == "__main__":
    main()
