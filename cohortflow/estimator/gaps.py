"""Histories with missing periods: dropping the broken pairs, or using them by EM with powers of P.

A pair of rows g periods apart saw P^g. Given P, the expected number of one-period moves i -> j inside such pairs
a -> b is n_ab(g) sum_{s<g} (P^s)_ai P_ij (P^{g-1-s})_jb / (P^g)_ab; adding them to the moves that were seen and
taking shares again raises the likelihood until nothing changes. An exit carries its own date, so it comes last.

Both are right when rows are missing by chance; dropping needs less and loses precision, filling gaps with the
last state (never done here) makes stays too likely. Source: Dempster, Laird & Rubin (1977) J. R. Stat. Soc. B
39, 1.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.window import Window
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[np.float64]

WAYS = ("drop", "em")
MOST_ROUNDS = 500
LONGEST_GAP = 60


def with_gaps(tally: Tally, window: Window, rates: RowCounts, way: str) -> tuple[RowCounts, tuple[str, ...]]:
    """The counts with the moves that broken pairs are expected to hold, and notes.

    way : "drop" (the counts as they are) or "em". CallError for another; NotIdentified when a broken pair needs
    a state that was never seen to move.
    """
    if way not in WAYS:
        raise CallError(f'Unknown way "{way}" for gaps. Allowed: {listed(WAYS)}.')
    moves = tally.table("moves")
    broken = moves[(moves["gap"] > 1) & (moves["next_state"] >= 0) & window.keeps(moves["period"])]
    if way == "drop" or broken.empty:
        return rates, ()
    size = len(tally.states)
    longest = int(broken["gap"].max())
    if longest > LONGEST_GAP:
        raise NotIdentified(
            f'A gap of {longest} periods is too long for EM ({LONGEST_GAP} at most); use gaps="drop".'
        )
    counts = np.zeros((longest + 1, size, size))
    weight = broken["n"].to_numpy() * window.weight(broken["period"].to_numpy())
    np.add.at(counts, tuple(broken[c].to_numpy() for c in ("gap", "state", "next_state")), weight)
    expected, rounds = expected_moves(rates.N, counts, tally.states)
    ratio = np.divide(expected, rates.N, out=np.ones_like(expected), where=rates.N > 0)
    filled = replace(rates, n=rates.n * ratio[rates.row, rates.column])
    return filled, () if rounds < MOST_ROUNDS else ("not_converged",)


def expected_moves(seen: Array, broken: Array, states: States) -> tuple[Array, int]:
    """(K, K) one-period moves, seen and expected, at convergence; broken (G+1, K, K) pairs by gap.

    >>> states = States(["on", "off"])
    >>> gaps = np.zeros((3, 2, 2)); gaps[2] = [[10, 10], [10, 10]]
    >>> expected_moves(np.array([[30.0, 30.0], [30.0, 30.0]]), gaps, states)[0].round(6).tolist()
    [[50.0, 50.0], [50.0, 50.0]]
    """
    now = seen.astype(float)
    for k in range(1, MOST_ROUNDS + 1):
        P = _shares(now, states)
        fresh = seen + sum(
            (inside(P, broken[g], g) for g in range(2, len(broken)) if broken[g].any()), np.zeros(seen.shape)
        )
        if np.abs(fresh - now).max() <= 1e-10 * max(1.0, fresh.max()):
            return fresh, k
        now = fresh
    return now, MOST_ROUNDS


def inside(P: Array, pairs: Array, gap: int) -> Array:
    """(K, K) expected one-period moves inside pairs `gap` periods apart; rows of P are zero at exits."""
    powers = [np.eye(len(P))]
    for _ in range(gap):
        powers.append(powers[-1] @ P)
    reach = powers[gap]
    lost = (pairs > 0) & (reach <= 0)
    if lost.any():
        raise NotIdentified(
            f"{int(pairs[lost].sum())} pair(s) of rows {gap} periods apart cannot follow from the moves that were "
            'seen; use gaps="drop".'
        )
    weight = np.divide(pairs, reach, out=np.zeros_like(pairs), where=pairs > 0)
    backward = (powers[s].T @ weight @ powers[gap - 1 - s].T for s in range(gap))
    return P * sum(backward, np.zeros_like(P))


def _shares(counts: Array, states: States) -> Array:
    total = counts.sum(axis=1, keepdims=True)
    P = np.divide(counts, total, out=np.zeros_like(counts), where=total > 0)
    P[states.exit_mask] = 0.0
    return P
