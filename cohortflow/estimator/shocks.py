"""How much months differ: the size and persistence of shocks that everybody shares.

    log-weight of the move i -> j in period t = mu_ij + f_t 1{j is an exit} + e_ijt

f (shared by all moves into exits) and e (each cell its own) are stationary first-order autoregressions with
standard deviations `exit_sd`, `cell_sd` and one autocorrelation. Their posterior is computed on a grid that
includes "none" from the log-odds of every row and period (shock_rows.py); cell means are diffuse, and seasons
are means of their own when the model has seasons, so that a season is not taken for a shock. A plain model
has none, so to it a season is a shock: its band says what it does not know.

Both parts are needed: without f, bands of a large base cover half of what they should when months share luck.
A short history cannot tell persistence from level: below 18 periods the note "short_history" says so, and
what
is drawn then follows mostly the prior: half-Cauchy at .25 for the sizes, flat on 0 .. .9 for persistence.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import NotIdentified
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shock_rows import Whitened, row_logs
from cohortflow.record import Record
from cohortflow.states import States

Array = NDArray[np.float64]

SIZES = np.array([0.0, 0.025, 0.05, 0.075, 0.1, 0.14, 0.18, 0.22, 0.27, 0.33, 0.42, 0.6, 0.9])
PERSISTENCES = np.array([0.0, 0.15, 0.3, 0.45, 0.6, 0.7, 0.8, 0.9])
PRIOR_SIZE = 0.25
SHORT_HISTORY = 18
SHORTEST = 6


@dataclass(frozen=True, repr=False, eq=False)
class Shocks(Record):
    """Posterior of the law of shocks.

    posterior : (persistences, cell sizes, exit sizes) probabilities over the grids of this module
    first : ordinal of time 0;  times : number of them;  whitened : the rows' measurements, by persistence
    information : (persistences, cell sizes) of (T, T) information on f and its (T,) right side
    notes : "short_history" below 18 periods

    `to_frame`: parameter (exit_sd, cell_sd, persistence), mean, low, high (90 %).
    """

    states: States
    first: int
    times: int
    posterior: Array
    whitened: tuple[tuple[Whitened, ...], ...]
    information: tuple[tuple[tuple[Array, Array], ...], ...]
    notes: tuple[str, ...] = ()
    kind: ClassVar[str] = "shocks"

    @cached_property
    def summary(self) -> Mapping[str, tuple[float, float, float]]:
        """Mean, 5 % and 95 % points of each parameter."""
        axes = {"persistence": (PERSISTENCES, 0), "cell_sd": (SIZES, 1), "exit_sd": (SIZES, 2)}
        out = {}
        for name, (grid, axis) in axes.items():
            weight = self.posterior.sum(axis=tuple({0, 1, 2} - {axis}))
            at = np.searchsorted(weight.cumsum(), [0.05, 0.95])
            low, high = grid[np.minimum(at, len(grid) - 1)]
            out[name] = (float(weight @ grid), float(low), float(high))
        return out

    def to_frame(self) -> pd.DataFrame:
        """parameter, mean, low, high."""
        rows = [(name, *values) for name, values in self.summary.items()]
        return pd.DataFrame(rows, columns=["parameter", "mean", "low", "high"])

    def headline(self) -> str:
        parts = [f"{name} {values[0]:.2f}" for name, values in self.summary.items()]
        return f"shocks over {self.times} periods: " + ", ".join(parts)

    def about(self) -> Mapping[str, Any]:
        return {"periods": self.times, "notes": list(self.notes)}


def correlation(times: int, persistence: float) -> Array:
    """(T, T) correlation of a first-order autoregression.

    >>> correlation(3, 0.5).tolist()
    [[1.0, 0.5, 0.25], [0.5, 1.0, 0.5], [0.25, 0.5, 1.0]]
    """
    lag = np.abs(np.subtract.outer(np.arange(times), np.arange(times)))
    return persistence**lag if persistence else np.eye(times)


def estimate_shocks(counts: RowCounts, states: States, *, cycle_position: Any = None) -> Shocks:
    """The posterior of sizes and persistence from counts by period.

    cycle_position : function from ordinal to place in the season's cycle; None takes no seasons out. Seasons
        are taken out where the history holds two full cycles (else they stay in, noted "seasons_kept")

    NotIdentified when fewer than 6 periods are there, or no row has two destinations that are often enough.

    >>> states = States(["fresh", "steady", "left"], exits=["left"])
    >>> leaving = np.array([60, 140] * 12)  # of a thousand, in turn: log-odds .3 up and .6 down around .1
    >>> t = np.arange(24)
    >>> one = np.ones(48)
    >>> counts = RowCounts(states.allowed, one, np.repeat([1, 2], 24), 0 * one, np.tile(t, 2),
    ...                    np.append(1000 - leaving, leaving), one, one)
    >>> estimate_shocks(counts, states).summary["exit_sd"][0] > 0.2
    True
    """
    periods, cube = counts.by_period()
    first, times = int(periods[0]), int(periods[-1] - periods[0] + 1)
    if len(periods) < SHORTEST:
        raise NotIdentified(
            f"The variation between periods cannot be told from {len(periods)} periods of moves; "
            f"{SHORTEST} are the least, 18 or more are good."
        )
    whole = np.zeros((times, *cube.shape[1:]))
    whole[periods - first] = cube
    position, notes = _positions(first, times, cycle_position)
    if len(periods) < SHORT_HISTORY:
        notes = (*notes, "short_history")
    logs = row_logs(whole, states.exit_mask, position)
    if not logs:
        raise NotIdentified(
            "No state has two destinations with 20 moves or more over the periods, so the variation between "
            "periods cannot be estimated; lengthen the history or merge rare states."
        )
    whitened = tuple(tuple(Whitened.of(log, correlation(times, r)) for log in logs) for r in PERSISTENCES)
    posterior, information = _posterior(whitened, times)
    return Shocks(states, first, times, posterior, whitened, information, notes)


def _positions(first: int, times: int, cycle_position: Any) -> tuple[NDArray[np.int64], tuple[str, ...]]:
    flat = np.zeros(times, dtype=np.int64)
    if cycle_position is None:
        return flat, ()
    place = np.array([cycle_position(first + t) for t in range(times)], dtype=np.int64)
    if times < 2 * len(np.unique(place)):
        return flat, ("seasons_kept",)
    return place, ()


def _posterior(
    whitened: tuple[tuple[Whitened, ...], ...], times: int
) -> tuple[Array, tuple[tuple[tuple[Array, Array], ...], ...]]:
    score = np.empty((len(PERSISTENCES), len(SIZES), len(SIZES)))
    information = []
    for a, persistence in enumerate(PERSISTENCES):
        root = np.linalg.cholesky(correlation(times, persistence))
        line = []
        for b, size in enumerate(SIZES):
            rows = [w.profile(size) for w in whitened[a]]
            M, m = np.sum([r[1] for r in rows], axis=0), np.sum([r[2] for r in rows], axis=0)
            line.append((M, m))
            score[a, b] = sum(r[0] for r in rows) + _exit_scores(root, M, m)
        information.append(tuple(line))
    prior = _size_prior()
    log_posterior = -0.5 * (score - score.min()) + np.log(prior)[:, None] + np.log(prior)
    log_posterior += np.log(_spacing(PERSISTENCES))[:, None, None]
    weight = np.exp(log_posterior - log_posterior.max())
    return weight / weight.sum(), tuple(information)


def _exit_scores(root: NDArray[Any], M: Array, m: Array) -> Array:
    """(sizes,) -2 log-likelihood that f adds, for each size of f."""
    values, vectors = np.linalg.eigh(root.T @ M @ root)
    values, turned = np.maximum(values, 0.0), vectors.T @ (root.T @ m)
    square = SIZES[:, None] ** 2
    return (np.log1p(square * values) - square * turned**2 / (1 + square * values)).sum(axis=1)


def _size_prior() -> Array:
    return _spacing(SIZES) / (1 + (SIZES / PRIOR_SIZE) ** 2)


def _spacing(grid: Array) -> Array:
    """The stretch of the axis that each grid point stands for."""
    edges = np.concatenate([grid[:1], (grid[1:] + grid[:-1]) / 2, grid[-1:]])
    return np.diff(edges)
