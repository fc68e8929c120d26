r"""Times until a state, or a set of states, is first entered.

T_ij = number of steps until the first arrival at j, at least 1; on the diagonal the time to return.

    m_ij  = 1 + sum_{k != j} p_ik m_kj                              mean
    v_ij  = sum_{k != j} p_ik v_kj + sum_k p_ik (m_kj - (m_ij - 1))^2,  m_jj read as 0 on the right   variance
    f_ij(1) = p_ij,  f_ij(n) = sum_{k != j} p_ik f_kj(n - 1)        distribution

Solved by elimination without subtraction; infinite where arrival is not certain.

Source: Kemeny & Snell (1960), Finite Markov Chains, ch. 4; Grinstead & Snell (1997), Introduction to
Probability, ch. 11.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError
from cohortflow.markov.arguments import Array, Flags, check_states, check_steps, check_stochastic, grid
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.structure import leads_to, sure


def mean_first_passage(P: ArrayLike) -> Array:
    """m, shape (K, K), in periods: mean time from row to first arrival at column; diagonal: mean return time.

    inf where the arrival is not certain.

    >>> mean_first_passage([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]]).round(4)
    array([[2.5   , 4.    , 3.3333],
           [2.6667, 5.    , 2.6667],
           [3.3333, 4.    , 2.5   ]])
    """
    return _passages(check_stochastic(P))[0]


def variance_first_passage(P: ArrayLike) -> Array:
    """Variance of the first-passage times, shape (K, K), in periods squared; inf where the mean is infinite.

    >>> variance_first_passage([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]]).round(4)
    array([[ 5.5833, 12.    ,  6.8889],
           [ 6.2222, 12.    ,  6.2222],
           [ 6.8889, 12.    ,  5.5833]])
    """
    return _passages(check_stochastic(P))[1]


def mean_time_to(P: ArrayLike, targets: Iterable[int]) -> Array:
    """Mean periods until the set is entered, shape (K,): 0 inside it, inf where entering is not certain.

    >>> mean_time_to([[0.5, 0.5, 0.0], [0.0, 0.75, 0.25], [0.0, 0.0, 1.0]], [2])
    array([6., 4., 0.])
    """
    matrix = check_stochastic(P)
    chosen = check_states(targets, len(matrix), name="targets")
    certain = sure(matrix > 0, chosen)
    times = np.where(certain, 0.0, np.inf)
    out = [s for s in np.flatnonzero(certain).tolist() if s not in chosen]
    if out:
        entering = matrix[grid(out, chosen)].sum(axis=1)
        times[out] = eliminate(matrix[grid(out, out)], entering).solve(np.ones(len(out)))
    return times


def first_passage_law(P: ArrayLike, target: int, *, steps: int) -> Array:
    """f, shape (steps, K): f[n-1, i] is the probability that the first arrival at target from i is at step n.

    >>> first_passage_law([[0.7, 0.2, 0.1], [0.3, 0.4, 0.3], [0.2, 0.45, 0.35]], 2, steps=3)[:, 0].round(4)
    array([0.1  , 0.13 , 0.121])
    """
    matrix = check_stochastic(P)
    (chosen,) = check_states([target], len(matrix), name="target")
    law = np.empty((check_steps(steps, least=1), len(matrix)))
    law[0] = matrix[:, chosen]
    onward = matrix.copy()
    onward[:, chosen] = 0.0
    for n in range(1, len(law)):
        law[n] = onward @ law[n - 1]
    return law


def reach_probability(P: ArrayLike) -> Array:
    """Probability (K, K) of ever arriving at column from row, at step 1 or later; diagonal: of a return.

    >>> reach_probability([[0.5, 0.25, 0.25], [0.0, 1.0, 0.0], [0.0, 0.5, 0.5]])
    array([[0.5, 1. , 0.5],
           [0. , 1. , 0. ],
           [0. , 1. , 0.5]])
    """
    matrix = check_stochastic(P)
    found = np.empty_like(matrix)
    for target in range(len(matrix)):
        at_once = _hit(matrix, np.arange(len(matrix)) == target, np.zeros(len(matrix), dtype=bool))
        found[:, target] = at_once
        found[target, target] = (
            1.0 if sure(matrix > 0, [target])[_next(matrix, target)].all() else matrix[target] @ at_once
        )
    return found


def hit_before(P: ArrayLike, first: Iterable[int], second: Iterable[int]) -> Array:
    """Probability, shape (K,), that the set `first` is met before the set `second`; time 0 counts.

    1 in `first`, 0 in `second`; a path that meets neither counts as not meeting `first`.

    >>> hit_before([[0.7, 0.2, 0.1], [0.3, 0.4, 0.3], [0.2, 0.45, 0.35]], [2], [0])
    array([0. , 0.5, 1. ])
    """
    matrix = check_stochastic(P)
    wanted = np.zeros(len(matrix), dtype=bool)
    other = np.zeros(len(matrix), dtype=bool)
    wanted[list(check_states(first, len(matrix), name="first"))] = True
    other[list(check_states(second, len(matrix), name="second"))] = True
    if (wanted & other).any():
        both = np.flatnonzero(wanted & other).tolist()
        raise CallError(f"states {both} stand in both sets; `first` and `second` must not share a state")
    return _hit(matrix, wanted, other)


def scatter(rows: Array, ahead: Array, centre: Array) -> Array:
    """sum_k p_ik (ahead_k - centre_i)^2: what one step adds to the variance of the time to go.

    >>> scatter(np.array([[0.5, 0.25, 0.25]]), np.array([0.0, 2.0, 4.0]), np.array([1.5]))
    array([2.75])
    """
    return np.einsum("ik,ik->i", rows, (ahead[None, :] - centre[:, None]) ** 2)


def _passages(matrix: Array) -> tuple[Array, Array]:
    means, variances = np.full_like(matrix, np.inf), np.full_like(matrix, np.inf)
    moves = matrix > 0
    for target in range(len(matrix)):
        certain = sure(moves, [target])
        out = np.flatnonzero(certain & (np.arange(len(matrix)) != target))
        # `ahead` is the time still to go, 0 at the target; states that are not certain to arrive play no part
        ahead, spread = np.zeros(len(matrix)), np.zeros(len(matrix))
        if out.size:
            steps = eliminate(matrix[grid(out, out)], matrix[out, target])
            ahead[out] = steps.solve(np.ones(out.size))
            spread[out] = steps.solve(scatter(matrix[out], ahead, ahead[out] - 1.0))
        means[out, target], variances[out, target] = ahead[out], spread[out]
        if certain[_next(matrix, target)].all():
            means[target, target] = 1.0 + matrix[target] @ ahead
            around = scatter(matrix[[target]], ahead, means[[target], target] - 1.0)[0]
            variances[target, target] = matrix[target] @ spread + around
    return means, variances


def _next(matrix: Array, state: int) -> Flags:
    return matrix[state] > 0


def _hit(matrix: Array, wanted: Flags, other: Flags) -> Array:
    """Probability of meeting `wanted` before `other`, exactly 1 or 0 where it is certain or impossible."""
    moves = matrix > 0
    targets, barred = np.flatnonzero(wanted).tolist(), np.flatnonzero(wanted | other).tolist()
    hopeful = leads_to(moves, targets, barred=barred)
    found = np.where(wanted, 1.0, 0.0)
    failing = leads_to(moves, np.flatnonzero(~hopeful).tolist(), barred=targets)
    found[hopeful & ~failing] = 1.0
    out = np.flatnonzero(hopeful & failing & ~wanted)
    if out.size:
        settled = np.setdiff1d(np.arange(len(matrix)), out)
        leaving = matrix[grid(out, settled)]
        found[out] = eliminate(matrix[grid(out, out)], leaving.sum(axis=1)).solve(leaving @ found[settled])
    return found
