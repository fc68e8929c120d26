"""Joining neighbouring groups of rows that do not differ: how fine a ladder must be.

Two neighbours are worth telling apart when the likelihood ratio between one common and two own sets of rows,
over the noise of customers who differ, exceeds (parameters saved) x log(moves): Schwarz's criterion.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import xlogy

Array = NDArray[np.float64]


def gain(one: Array, two: Array, noise: Array, moves: float) -> float:
    """How much telling two groups apart gains: positive keeps them, negative joins them.

    one, two : (K, K) counts by state;  noise : (K,) variance relative to the multinomial one
    """
    both = one + two
    ratio = _log_likelihood(one) + _log_likelihood(two) - _log_likelihood(both)
    tested = (one.sum(axis=1) > 0) & (two.sum(axis=1) > 0)
    saved = np.where(tested, (both > 0).sum(axis=1) - 1, 0)
    return float((2 * ratio / noise)[tested].sum() - saved.sum() * np.log(max(moves, 2.0)))


def joined(groups: Array, noise: Array) -> list[int]:
    """First positions of the bands that are left after joining (G, K, K) neighbours, cheapest first.

    >>> same, other = np.array([[90.0, 10.0], [0, 0]]), np.array([[500.0, 500.0], [0, 0]])
    >>> joined(np.stack([other, same, same]), np.ones(2))
    [0, 1]
    """
    firsts = list(range(len(groups)))
    parts = [np.asarray(g, dtype=float) for g in groups]
    moves = float(groups.sum())
    while len(parts) > 1:
        gains = [gain(a, b, noise, moves) for a, b in zip(parts, parts[1:], strict=False)]
        at = int(np.argmin(gains))
        if gains[at] > 0:
            break
        parts[at : at + 2] = [parts[at] + parts[at + 1]]
        del firsts[at + 1]
    return firsts


def _log_likelihood(counts: Array) -> Array:
    """(K,) maximised multinomial log-likelihood of each row."""
    total = counts.sum(axis=1)
    return xlogy(counts, counts).sum(axis=1) - xlogy(total, total)
