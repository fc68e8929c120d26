r"""Continuous time: chains given by rates, and what they do over any length of time.

G holds rates a unit of time: g_ij >= 0 for i != j, g_ii = -sum_{j != i} g_ij.

    P(t) = exp(G t)                      moves within t
    O(t) = int_0^t exp(G s) ds           time spent in column within t, from row

Source: Norris (1997), Markov Chains, ch. 2-3; Van Loan (1978), IEEE Trans. Automatic Control 23(3) (the
integral).
"""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np
from numpy.typing import ArrayLike
from scipy.linalg import expm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.arguments import ROW_TOLERANCE, Array, check_states, grid
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.structure import communicating_classes, is_closed, reachability, sure


def check_generator(G: ArrayLike, *, name: str = "G") -> Array:
    """G as a fresh float array, after checking that it is a generator. Raises CallError naming the row.

    Rows must sum to 0 within 1e-9 of their size.

    >>> check_generator([[-0.2, 0.2, 0.0], [0.1, -0.4, 0.3], [0.0, 0.0, 0.0]]).shape
    (3, 3)
    """
    rates = check_rates(G, name)
    for row, column in np.argwhere((rates < 0) & ~np.eye(len(rates), dtype=bool)):
        raise CallError(
            f"{name}[{row}, {column}] is {rates[row, column]:.6g}; a rate of moving is never negative"
        )
    scale = np.maximum(np.abs(rates).sum(axis=1), 1.0)
    for row in np.flatnonzero(np.abs(rates.sum(axis=1)) > ROW_TOLERANCE * scale):
        raise CallError(
            f"row {row} of {name} sums to {rates[row].sum():.12g}; a row of rates sums to 0: "
            "put minus the sum of the others on the diagonal"
        )
    return rates


def transition_matrix(G: ArrayLike, t: float) -> Array:
    """P(t) = exp(G t), shape (K, K): a stochastic matrix, exactly 0 where the column cannot be reached.

    >>> transition_matrix([[-0.2, 0.2, 0.0], [0.0, -0.5, 0.5], [0.0, 0.0, 0.0]], 1.0).round(4)
    array([[0.8187, 0.1415, 0.0398],
           [0.    , 0.6065, 0.3935],
           [0.    , 0.    , 1.    ]])
    """
    rates, length = check_generator(G), check_time(t)
    moved = np.clip(expm(rates * length), 0.0, None) * reachability(_moves(rates))
    return moved / moved.sum(axis=1, keepdims=True)


def occupation_times(G: ArrayLike, t: float) -> Array:
    """O(t), shape (K, K): expected time spent in column within t, from row; rows sum to t.

    >>> occupation_times([[-1.0, 1.0], [0.0, 0.0]], 2.0).round(4)
    array([[0.8647, 1.1353],
           [0.    , 2.    ]])
    """
    rates, length = check_generator(G), check_time(t)
    size = len(rates)
    # exp of [[G, I], [0, 0]] t holds the integral in its upper right block
    block = np.zeros((2 * size, 2 * size))
    block[:size, :size] = rates
    block[:size, size:] = np.eye(size)
    return np.clip(expm(block * length)[:size, size:], 0.0, None) * reachability(_moves(rates))


def stationary_of_rates(G: ArrayLike) -> Array:
    """The stationary law, shape (K,), of a generator with one closed class: share of time in each state.

    Raises NotIdentified when there are several closed classes.

    >>> stationary_of_rates([[-1.0, 1.0, 0.0], [2.0, -3.0, 1.0], [0.0, 2.0, -2.0]]).round(4)
    array([0.5714, 0.2857, 0.1429])
    """
    rates = check_generator(G)
    moves = _moves(rates)
    closed = [group for group in communicating_classes(moves) if is_closed(moves, group)]
    if len(closed) > 1:
        raise NotIdentified(
            f"the closed classes {closed} each have a law of their own; the long run depends on the start"
        )
    law = np.zeros(len(rates))
    law[list(closed[0])] = eliminate(moves[grid(closed[0], closed[0])], np.zeros(len(closed[0]))).left_null()
    return law


def mean_time_to_absorption(G: ArrayLike, targets: Iterable[int]) -> Array:
    """Mean time until the set is entered, shape (K,), in the rates' unit: 0 inside, inf where not certain.

    >>> mean_time_to_absorption([[-1.0, 1.0, 0.0], [0.5, -1.0, 0.5], [0.0, 0.0, 0.0]], [2])
    array([4., 3., 0.])
    """
    rates = check_generator(G)
    chosen = check_states(targets, len(rates), name="targets")
    moves = _moves(rates)
    certain = sure(moves, chosen)
    times = np.where(certain, 0.0, math.inf)
    out = [s for s in np.flatnonzero(certain).tolist() if s not in chosen]
    if out:
        entering = moves[grid(out, chosen)].sum(axis=1)
        times[out] = eliminate(moves[grid(out, out)], entering).solve(np.ones(len(out)))
    return times


def check_rates(values: ArrayLike, name: str) -> Array:
    """A square matrix of finite numbers, as a fresh float array; a row of NaN is refused.

    >>> check_rates([[0.0, float("nan")], [0.0, 0.0]], "G")
    Traceback (most recent call last):
    cohortflow.errors.CallError: row 0 of G holds nan: nothing was observed there, and a rate is not ...
    """
    rates = np.array(values, dtype=float)
    if rates.ndim != 2 or rates.shape[0] != rates.shape[1] or rates.size == 0:
        raise CallError(
            f"{name} has shape {rates.shape}; it must be a square matrix, row = from, column = to"
        )
    for row in np.flatnonzero(~np.isfinite(rates).all(axis=1)):
        raise CallError(
            f"row {row} of {name} holds {rates[row][~np.isfinite(rates[row])][0]}: nothing was observed "
            "there, and a rate is not invented; give the row a prior or leave its state out"
        )
    return rates


def check_time(t: float) -> float:
    """A length of time: finite, not negative.

    >>> check_time(2)
    2.0
    """
    if not (np.isfinite(t) and t >= 0):
        raise CallError(f"t is {t!r}; a length of time is a finite number, not below 0")
    return float(t)


def _moves(rates: Array) -> Array:
    """The rates of moving: the generator with its diagonal set to 0."""
    return np.where(np.eye(len(rates), dtype=bool), 0.0, rates)
