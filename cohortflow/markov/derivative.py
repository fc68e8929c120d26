r"""Derivatives of n-step mixes, long-run laws and passage times with respect to the transition matrix.

    mix         x_h = x P^h                 dx_hb / dP_ij = sum_{k<h} (x P^k)_i (P^{h-1-k})_jb
    stationary  pi P = pi                   dpi_k / dP_ij = pi_i D_jk
    Kemeny      K = tr Z                    dK / dP_ij    = (D^2)_ji
    deviation   Z = D + 1 pi'               dZ_ab / dP_ij = Z_ai Z_jb - pi_i (D^2)_jb
    passage     m_a = 1 + sum_{l != t} p_al m_l    dm_a / dP_il = N_ai m_l,  N without the target t

D is the deviation matrix of `stationary`. How to read the results: `gradient`.

Source: Schweitzer (1968), Journal of Applied Probability 5 (stationary law, fundamental matrix); Caswell
(2001), Matrix Population Models, ch. 5 and 9; all of them are checked by complex step in the tests.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.arguments import (
    Array,
    check_start,
    check_states,
    check_steps,
    check_stochastic,
    check_substochastic,
    grid,
)
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.gradient import Derivative, base_row, joined
from cohortflow.markov.quasi_stationary import Remaining, remaining
from cohortflow.markov.stationary import law_and_deviation
from cohortflow.markov.structure import sure


def mix_derivative(
    P: ArrayLike, start: ArrayLike, *, steps: int, weights: ArrayLike | None = None
) -> Derivative:
    """Of the mix x P^h, or of its products with the columns of weights (K, T), with respect to P (K, K).

    start: shares or counts (K,), or the index of a state. Targets: states, or the columns of weights.

    >>> mix_derivative([[0.8, 0.2], [0.0, 1.0]], 0, steps=2).gradient(0)
    array([[1.6, 0. ],
           [0.2, 0. ]])
    """
    matrix = check_stochastic(P)
    count = check_steps(steps, least=1)
    return joined(sequence_derivative([matrix] * count, start, weights=weights))


def sequence_derivative(
    matrices: Sequence[ArrayLike],
    start: ArrayLike,
    *,
    weights: ArrayLike | None = None,
    joiners: ArrayLike | None = None,
) -> tuple[Derivative, ...]:
    """Of x_h W with x_k = x_{k-1} P_k + j_k: one derivative for each of P_1 .. P_h, all with the same value.

    weights: W (K, T), default the states themselves; joiners: j (h, K), default none. Where one matrix
    stands at several places (a season that comes round), `joined` adds up its derivatives.

    >>> first, second = sequence_derivative([[[0.8, 0.2], [0.0, 1.0]], [[0.5, 0.5], [0.0, 1.0]]], 0)
    >>> first.value, first.gradient(0)[0, 0], second.gradient(0)[0, 0]
    (array([0.4, 0.6]), np.float64(0.5), np.float64(0.8))
    """
    chain = [check_stochastic(matrix, name=f"matrices[{place}]") for place, matrix in enumerate(matrices)]
    if not chain or len({matrix.shape for matrix in chain}) > 1:
        raise CallError("matrices must hold at least one matrix, all of the same shape")
    size = len(chain[0])
    ahead = _weights(weights, size)
    arriving = _joiners(joiners, len(chain), size)
    bases = [base_row(start, size)]
    for matrix, fresh in zip(chain, arriving, strict=True):
        bases.append(bases[-1] @ matrix + fresh)
    value = bases[-1] @ ahead
    parts = []
    for base, matrix in zip(reversed(bases[:-1]), reversed(chain), strict=True):
        parts.append(Derivative(value, base[None, None], ahead.T[None]))
        ahead = matrix @ ahead
    return tuple(reversed(parts))


def stationary_derivative(P: ArrayLike) -> Derivative:
    """Of the stationary law of a chain with one closed class; targets: the K states.

    >>> stationary_derivative([[0.9, 0.1], [0.3, 0.7]]).gradient(0).round(4)
    array([[ 0.4687, -1.4062],
           [ 0.1562, -0.4687]])
    """
    matrix = check_stochastic(P)
    law, away = law_and_deviation(matrix)
    return Derivative(law, law[None, None], away.T[None])


def kemeny_derivative(P: ArrayLike) -> Derivative:
    """Of the Kemeny constant tr Z; one target, r = K terms.

    >>> kemeny_derivative([[0.9, 0.1], [0.3, 0.7]]).gradient(0).round(4)
    array([[ 1.5625, -4.6875],
           [-1.5625,  4.6875]])
    """
    matrix = check_stochastic(P)
    _, away = law_and_deviation(matrix)
    return Derivative(np.array([np.trace(away) + 1.0]), away[:, None, :], away.T[:, None, :])


def fundamental_derivative(P: ArrayLike, start: ArrayLike) -> Derivative:
    """Of start Z, one row of the fundamental matrix or a mixture of rows; targets: the K states.

    >>> fundamental_derivative([[0.9, 0.1], [0.3, 0.7]], 0).value
    array([ 1.375, -0.375])
    """
    matrix = check_stochastic(P)
    law, away = law_and_deviation(matrix)
    whole = away + law
    row = check_start(start, len(matrix)) @ whole
    return Derivative(row, np.stack([row, -law])[:, None, :], np.stack([whole.T, (away @ away).T]))


def first_passage_derivative(P: ArrayLike, target: int) -> Derivative:
    """Of the mean first-passage times to one state, from each of the K states (from itself: to return).

    NaN for starts from which the arrival is not certain; their value is infinite.

    >>> first_passage_derivative([[0.9, 0.1], [0.3, 0.7]], 1).gradient(0).round(6)
    array([[100.,   0.],
           [  0.,   0.]])
    """
    matrix = check_stochastic(P)
    (chosen,) = check_states([target], len(matrix), name="target")
    certain = sure(matrix > 0, [chosen])
    out = np.flatnonzero(certain & (np.arange(len(matrix)) != chosen)).tolist()
    ahead, visits = np.zeros(len(matrix)), np.zeros_like(matrix)
    visits[chosen, chosen] = 1.0
    if out:
        visits[grid(out, out)] = eliminate(matrix[grid(out, out)], matrix[out, chosen]).inverse()
        ahead[out] = visits[grid(out, out)].sum(axis=1)
        visits[chosen, out] = matrix[chosen, out] @ visits[grid(out, out)]
    value = np.where(certain, ahead, np.inf)
    value[chosen] = 1.0 + matrix[chosen] @ ahead
    if not certain[matrix[chosen] > 0].all():
        value[chosen] = np.inf
    visits[np.isinf(value)] = np.nan
    return Derivative(value, visits[None], ahead[None, None])


def retention_derivative(Q: ArrayLike) -> Derivative:
    """Of lambda, the share kept of those remaining: dlambda/dQ_ij = u_i w_j; one target.

    >>> retention_derivative([[0.6, 0.3], [0.3, 0.6]]).gradient(0).round(6)
    array([[0.5, 0.5],
           [0.5, 0.5]])
    """
    kept = _simple(check_substochastic(Q))
    return Derivative(np.array([kept.retention]), kept.mix[None, None], kept.weight[None, None])


def remaining_mix_derivative(Q: ArrayLike) -> Derivative:
    """Of u, the mix of those remaining; targets: the m states of Q.

    du_k/dQ_ij = u_i (D_jk - (D 1)_j u_k),  D = (lambda I - Q + w u')^{-1} - w u'.
    Raises NotIdentified when there is no such mix, or when classes tie (it then has no derivative).

    >>> remaining_mix_derivative([[0.6, 0.3], [0.3, 0.6]]).gradient(0).round(6)
    array([[ 0.416667, -0.416667],
           [ 0.416667, -0.416667]])
    """
    matrix = check_substochastic(Q)
    kept = _simple(matrix)
    base = np.outer(kept.weight, kept.mix)
    away = np.linalg.inv(kept.retention * np.eye(len(matrix)) - matrix + base) - base
    right = away - np.outer(away.sum(axis=1), kept.mix)
    return Derivative(kept.mix, kept.mix[None, None], right.T[None])


def _simple(matrix: Array) -> Remaining:
    kept = remaining(matrix)
    if not np.isfinite(kept.mix).all() or not np.isfinite(kept.weight).all():
        raise NotIdentified(f"the mix of those remaining has no derivative here: {kept.reason}")
    return kept


def _weights(weights: ArrayLike | None, size: int) -> Array:
    if weights is None:
        return np.eye(size)
    found = np.asarray(weights, dtype=float)
    if found.ndim != 2 or len(found) != size or not np.isfinite(found).all():
        raise CallError(
            f"weights has shape {found.shape}; it must hold finite numbers, one row for each of {size} states"
        )
    return found


def _joiners(joiners: ArrayLike | None, steps: int, size: int) -> Array:
    found = np.zeros((steps, size)) if joiners is None else np.asarray(joiners, dtype=float)
    if found.shape != (steps, size) or not np.isfinite(found).all():
        raise CallError(
            f"joiners has shape {found.shape}; it must hold finite numbers, one row for each of {steps} steps"
        )
    return found
