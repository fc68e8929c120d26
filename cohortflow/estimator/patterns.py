"""Customers as patterns of moves: what latent types are estimated from.

Given its first state, a chain's likelihood of a customer is prod p_ij^N_ij, so a customer is the counts of
its moves; customers with equal counts, first state and present state are one pattern with a multiplicity.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import NotIdentified
from cohortflow.estimator.window import Window
from cohortflow.tally import KINDS, Tally

Array = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Patterns:
    """U patterns over F cells that occur.

    cells : (F, 2) origin and destination;  moves : (U, F) weighted numbers of moves;  n : (U,) customers
    group : (U,) 0 .. 2K-1: first state in the window, plus K for customers already there when the log begins
    now : (U,) state in the last period, -1 = not there;  size : K
    """

    cells: Ints
    moves: Array
    n: Array
    group: Ints
    now: Ints
    size: int

    def sample(self, most: int, rng: np.random.Generator) -> Patterns:
        """At most about `most` customers, drawn without replacement."""
        total = int(self.n.sum())
        if total <= most:
            return self
        kept = rng.multivariate_hypergeometric(self.n.astype(np.int64), most, method="marginals")
        return self.weighted(kept.astype(float))

    def weighted(self, n: Array) -> Patterns:
        """The patterns with other multiplicities; empty ones are dropped."""
        some = n > 0
        return Patterns(self.cells, self.moves[some], n[some], self.group[some], self.now[some], self.size)

    def halves(self, rng: np.random.Generator) -> tuple[Patterns, Patterns]:
        """The customers in two halves by lot."""
        one = rng.binomial(self.n.astype(np.int64), 0.5).astype(float)
        return self.weighted(one), self.weighted(self.n - one)

    def table(self, weights: Array | None = None) -> Array:
        """(K, K) sums of moves, each pattern n times (or with the weights (U,))."""
        sums = (self.n if weights is None else weights) @ self.moves
        out = np.zeros((self.size, self.size))
        out[self.cells[:, 0], self.cells[:, 1]] = sums
        return out


def patterns_of(tally: Tally, window: Window) -> Patterns:
    """The patterns of the sampled customers in the window; NotIdentified when nobody was seen long enough."""
    paths = tally.table("paths")
    runs = parse_paths(paths["path"])
    n, size = paths["n"].to_numpy(float), len(tally.states)
    who, cell, weight, first, now = _moves(runs, len(paths), tally, window)
    cells, column = np.unique(cell, return_inverse=True)
    moves = np.zeros((len(paths), len(cells)))
    np.add.at(moves, (who, column), weight)
    group = np.where(first[:, 1] <= _last_unknown(tally), size, 0) + first[:, 0]
    used = moves.sum(axis=1) > 0
    rows = np.bincount(runs["who"], runs["length"] * (runs["state"] >= 0), minlength=len(paths))
    if n[used & (rows > 2)].sum() < 2:
        raise NotIdentified("Latent types need customers seen over two moves or more, and there are none.")
    pairs = np.stack([cells // size, cells % size], axis=1)
    return _distinct(pairs, moves[used], n[used], group[used], now[used], size)


def parse_paths(paths: pd.Series) -> pd.DataFrame:
    """One row a run: who (position of the path), state (-1 = gap), start (ordinal), length.

    >>> parse_paths(pd.Series(["10 2*3 -*2 0*1"])).to_numpy().tolist()
    [[0, 2, 10, 3], [0, -1, 13, 2], [0, 0, 15, 1]]
    """
    texts = paths.tolist()
    many = np.array([text.count("*") for text in texts], dtype=np.int64)
    firsts = np.array([text[: text.index(" ")] for text in texts], dtype=np.int64)
    flat = " ".join(text[text.index(" ") + 1 :] for text in texts).replace("-*", "-1*").replace("*", " ")
    state, length = np.array(flat.split(), dtype=np.int64).reshape(-1, 2).T
    who = np.repeat(np.arange(len(texts)), many)
    before = np.cumsum(length) - length
    offset = before[np.cumsum(many) - many]
    return pd.DataFrame(
        {"who": who, "state": state, "start": firsts[who] + before - offset[who], "length": length}
    )


def _moves(
    runs: pd.DataFrame, customers: int, tally: Tally, window: Window
) -> tuple[Ints, Ints, Array, Ints, Ints]:
    """Entries (who, cell, weight); (customers, 2) first state and period in the window; state now."""
    who, state, start, length = (runs[c].to_numpy() for c in ("who", "state", "start", "length"))
    size, exits = len(tally.states), np.append(tally.states.exit_mask, True)
    end = start + length  # first period after the run
    summed = _summed_weights(tally, window)
    zero = tally.meta.first

    def total(lo: Ints, hi: Ints) -> Array:
        """Weight of the origin periods lo .. hi - 1."""
        top = len(summed) - 1
        return summed[np.clip(hi - zero, 0, top)] - summed[np.clip(lo - zero, 0, top)]

    stays = total(start, end - 1)
    follows = np.zeros(len(who), dtype=bool)
    follows[:-1] = (who[1:] == who[:-1]) & (state[1:] >= 0)
    leaves = np.where(follows, total(end - 1, end), 0.0)
    live = ~exits[state]
    following = np.append(state[1:], -1)
    one, two = live & (stays > 0), live & (leaves > 0)
    entries = (
        np.concatenate([who[one], who[two]]),
        np.concatenate([state[one] * (size + 1), state[two] * size + following[two]]),
        np.concatenate([stays[one], leaves[two]]),
    )
    seen = live & (end > window.first)
    place = np.flatnonzero(seen)[::-1]
    first = np.zeros((customers, 2), dtype=np.int64)
    first[who[place]] = np.stack([state[place], np.maximum(start[place], window.first)], axis=1)
    now = np.full(customers, -1)
    here = live & (end == tally.meta.last + 1)
    now[who[here]] = state[here]
    return *entries, first, now


def _summed_weights(tally: Tally, window: Window) -> Array:
    periods = np.arange(tally.meta.first, tally.meta.last + 1)
    weight = np.where(window.keeps(pd.Series(periods)).to_numpy(), window.weight(periods), 0.0)
    return np.append(0.0, np.cumsum(weight))


def _last_unknown(tally: Tally) -> int:
    """The last period in which somebody of unknown history came into view."""
    if "starts" not in tally.meta.tables:
        return tally.meta.first
    starts = tally.table("starts")
    unknown = starts.loc[starts["kind"] == KINDS.index("unknown"), "period"]
    return int(unknown.max()) if len(unknown) else tally.meta.first - 1


def _distinct(cells: Ints, moves: Array, n: Array, group: Ints, now: Ints, size: int) -> Patterns:
    """Equal patterns as one; told apart by a fixed random projection of their counts."""
    direction = np.random.default_rng(0).random(moves.shape[1])
    key = np.stack([moves @ direction, group.astype(float), now.astype(float)], axis=1)
    order = np.lexsort(key.T)
    fresh = np.append(True, (np.diff(key[order], axis=0) != 0).any(axis=1))
    index = np.cumsum(fresh) - 1
    first = order[fresh]
    total = np.bincount(index, n[order]).astype(float)
    return Patterns(cells, moves[first], total, group[first], now[first], size)
