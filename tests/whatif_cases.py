"""What the tests of changes and levers share: a plain loop as oracle, complex steps, models of every kind."""

from types import SimpleNamespace

import numpy as np

from cohortflow.chain import Draws
from tests.projector_cases import CHAIN, STATES, P, banded, dirichlet_draws, seasonal, two_types

START = {"fresh": 40.0, "steady": 200.0, "paused": 30.0}
JOINERS = {"fresh": 25.0, "steady": 5.0}
MONEY = {
    "per_period": {"fresh": 4.0, "steady": 20.0},
    "on_move": [("paused", "steady", -3.0)],
    "discount_rate": 0.1,
    "timing": "middle",
    "currency": "GBP",
}
OTHER = np.vstack([P[0], [0, 0.6, 0.2, 0.15, 0.05], P[2:]])


def draws_of_chain(size=60, at_risk=400):
    """Dirichlet draws of CHAIN."""
    return Draws.of_matrices(CHAIN.schedule, [dirichlet_draws(P, at_risk, size)[:, None]])


def fit_like(size=60):
    """A model with draws, as a Fit has: CHAIN scattered by its rows."""
    asked = {}

    def draws(n, *, rng, covariance="customer"):
        asked["covariance"] = covariance
        return draws_of_chain(n)

    return SimpleNamespace(schedule=CHAIN.schedule, draws=draws, asked=asked, default=size)


def models():
    """Schedules of every kind: (name, schedule, a live state, an exit, opening, joiners)."""
    bands, _ = banded()
    types, _ = two_types()
    return [
        ("plain", CHAIN.schedule, "steady", "left", START, JOINERS),
        ("season", seasonal([P, OTHER, P]), "steady", "left", START, JOINERS),
        ("held", seasonal([P, OTHER], tail="hold"), "steady", "left", START, JOINERS),
        ("bands", bands, "live", "gone", {"live": 100.0}, {"live": 10.0}),
        ("types", types, "here", "gone", {"here": 100.0}, {"here": 10.0}),
    ]


def shift(row, to, d):
    """The row rule by hand, proportional: one row (K,), the move `to` takes d."""
    out = row * (1 - d / (1 - row[to]))
    out[to] = row[to] + d
    return out


def loop(matrices, start, inflow, rewards, discount):
    """Plain loop: matrices and rewards (H of (K, K)); returns counts (H+1, K) and discounted pay (H,)."""
    x, counts, paid = np.array(start, dtype=float), [np.array(start, dtype=float)], []
    for h, (matrix, reward) in enumerate(zip(matrices, rewards, strict=True)):
        pay = 0.0
        for i in range(len(x)):
            for j in range(len(x)):
                pay += x[i] * matrix[i, j] * reward[i, j]
        paid.append(discount[h] * pay)
        x = x @ matrix + inflow[h]
        counts.append(x)
    return np.array(counts), np.array(paid)


def amounts(weight=0.5):
    """(K, K) y_ij of MONEY: weight on the state at the start."""
    r = np.array([4.0, 20.0, 0, 0, 0])
    y = weight * r[:, None] + (1 - weight) * r[None]
    y[STATES.index("paused"), STATES.index("steady")] += -3.0
    return y
