r"""Derivatives of time to exit, visits, exits and the settled base with respect to P.

    visits        N_a.               dN_ab / dP_ij   = N_ai N_jb
    mean time     tau = N 1          dtau_a / dP_ij  = N_ai tau_j
    variance      (2N - I) tau - tau^2
                  dvar_a / dP_ij = 2 N_ai (N tau)_j + ((2N - I) N)_ai tau_j - 2 tau_a N_ai tau_j
    exit          B = N R            dB_ae / dP_ij  = N_ai B~_je,  B~ = B inside, 1 for the exit itself
    settled base  m = r N            dm_k / dP_ij    = m_i N_jk,  dm / dr = N

N, tau and B are those of `absorption`; i runs over the states inside (an exit's row is fixed), j over all
K columns. How to read the results: `gradient`. Starts from which exit is not certain have an infinite
value and NaN slopes, and slopes towards such states are left at 0: a certain start has no move there.

Source: Caswell (2013), Linear Algebra Appl. 438; checked by complex step in the tests.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.absorption import Absorption, absorb
from cohortflow.markov.arguments import Array, check_start, check_vector, grid
from cohortflow.markov.gradient import Derivative


def exit_time_derivative(P: ArrayLike, exits: Iterable[int]) -> Derivative:
    """Of the mean time to exit; targets: the states inside, in the order of `absorb(P, exits).inside`.

    >>> exit_time_derivative([[0.8, 0.2], [0.0, 1.0]], [1]).gradient(0)
    array([[25.,  0.],
           [ 0.,  0.]])
    """
    found = absorb(P, exits)
    return Derivative(found.mean_time, _spread_rows(found, _visits(found))[None], _times(found)[None, None])


def exit_variance_derivative(P: ArrayLike, exits: Iterable[int]) -> Derivative:
    """Of the variance of the time to exit; targets: the states inside.

    >>> exit_variance_derivative([[0.8, 0.2], [0.0, 1.0]], [1]).gradient(0)
    array([[225.,   0.],
           [  0.,   0.]])
    """
    found = absorb(P, exits)
    visits, times = _visits(found), np.where(found.certain, found.mean_time, 0.0)
    twice = 2.0 * visits @ visits - visits
    left = [2.0 * visits, twice, -2.0 * times[:, None] * visits]
    right = np.stack([_columns(found, visits @ times), _times(found), _times(found)])
    return Derivative(
        found.variance_time, np.stack([_spread_rows(found, rows) for rows in left]), right[:, None, :]
    )


def exit_probability_derivative(P: ArrayLike, exits: Iterable[int], *, exit: int) -> Derivative:
    """Of the probability of leaving by one of the exits, named by its state; targets: the states inside.

    Starts from which exit is not certain have their slopes too.

    >>> exit_probability_derivative([[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]], [1, 2], exit=1).gradient(0)
    array([[1.2, 2. , 0. ],
           [0. , 0. , 0. ],
           [0. , 0. , 0. ]])
    """
    found = absorb(P, exits)
    if exit not in found.exits:
        raise CallError(f"exit is {exit!r}; it must be one of the exits {list(found.exits)}")
    chance = found.exit_probability[:, found.exits.index(exit)]
    right = _columns(found, chance)
    right[exit] = 1.0
    finite = np.where(np.isfinite(found.visits), found.visits, 0.0)
    return Derivative(chance, _wide(found, finite)[None], right[None, None])


def visits_derivative(P: ArrayLike, exits: Iterable[int], start: ArrayLike) -> Derivative:
    """Of start N, expected periods in each inside state; start: a law over the K states, or a state inside.

    Raises NotIdentified when exit is not certain from the start.

    >>> visits_derivative([[0.8, 0.2], [0.0, 1.0]], [1], 0).gradient(0)
    array([[25.,  0.],
           [ 0.,  0.]])
    """
    found = absorb(P, exits)
    return _flow(found, check_start(start, len(found.matrix)))


def settled_base_derivative(P: ArrayLike, exits: Iterable[int], joiners: ArrayLike) -> Derivative:
    """Of the base m = r N that constant joiners r (K,) a period keep up; targets: states inside; dm/dr = N.

    Raises NotIdentified when joiners can get to a place that they never leave: the base then grows
    without end.

    >>> settled_base_derivative([[0.8, 0.2], [0.0, 1.0]], [1], [10.0, 0.0]).value
    array([50.])
    """
    found = absorb(P, exits)
    return _flow(found, check_vector(joiners, len(found.matrix), name="joiners"))


def exit_time_bias(P: ArrayLike, exits: Iterable[int], at_risk: ArrayLike) -> Array:
    """Leading bias of the mean time to exit, shape (m,), when row i was estimated from at_risk[i] moves (K,).

    E tau^_a - tau_a ~ sum_i N_ai sum_jl N_ji C_i[j, l] tau_l,  C_i = (diag p_i - p_i p_i') / n_i.

    >>> exit_time_bias([[0.8, 0.2], [0.0, 1.0]], [1], [100, 0]).round(6)
    array([0.2])
    """
    found = absorb(P, exits)
    inside = list(found.inside)
    counts = check_vector(at_risk, len(found.matrix), name="at_risk")[inside]
    visits, times = _visits(found), np.where(found.certain, found.mean_time, 0.0)
    moves = found.matrix[grid(inside, inside)]
    # N_ji C_i[j, l] tau_l summed over j and l, for every i
    own = (moves * visits.T) @ times - (moves * visits.T).sum(axis=1) * (moves @ times)
    own = np.where(counts > 0, own / np.where(counts > 0, counts, 1.0), np.where(own == 0, 0.0, np.nan))
    return np.where(found.certain, visits @ own, np.nan)


def _flow(found: Absorption, entering: Array) -> Derivative:
    inside = list(found.inside)
    stuck = [s for s, certain in zip(inside, found.certain, strict=True) if not certain and entering[s] != 0]
    if stuck:
        raise NotIdentified(
            f"exit is not certain from {stuck}, where this start enters: some stay for ever and their number "
            "has no limit; declare the missing exit, or leave those states out"
        )
    visits = _visits(found)
    base = entering[inside] @ visits
    return Derivative(base, _columns(found, base)[None, None], _wide(found, visits.T)[None])


def _visits(found: Absorption) -> Array:
    """N between starts of certain exit, 0 elsewhere."""
    return np.where(found.certain[:, None] & found.certain[None, :], found.visits, 0.0)


def _times(found: Absorption) -> Array:
    return _columns(found, np.where(found.certain, found.mean_time, 0.0))


def _columns(found: Absorption, values: Array) -> Array:
    """Values of the states inside, at their places among all K."""
    wide = np.zeros(len(found.matrix))
    wide[list(found.inside)] = values
    return wide


def _wide(found: Absorption, rows: Array) -> Array:
    wide = np.zeros((len(rows), len(found.matrix)))
    wide[:, list(found.inside)] = rows
    return wide


def _spread_rows(found: Absorption, rows: Array) -> Array:
    wide = _wide(found, rows)
    wide[~found.certain] = np.nan
    return wide
