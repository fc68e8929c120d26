r"""Where a chain settles: stationary laws, limits, time averages, and how far the start still matters.

    pi P = pi                        stationary law of a closed class, by elimination without subtraction
    A = lim (1/n) sum_{t<n} P^t      time average; equals lim P^n where no closed class is periodic
    D = (I - P)^# = (I - P + A)^{-1} - A      deviation: sum_t (P^t - A), in the sense of time averages
    Z = D + A                        fundamental matrix, (I - P + 1 pi')^{-1} for one closed class
    K = tr Z                         Kemeny constant: sum_j pi_j m_ij + 1, the same for every start i

Source: Grassmann, Taksar & Heyman (1985), Operations Research 33(5); Kemeny & Snell (1960), Finite Markov
Chains, ch. 4-5; Meyer (1975), SIAM Review 17(3) (group inverse); Hunter (1982), Linear Algebra Appl. 45
(g-inverses).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.arguments import Array, check_start, check_stochastic, grid
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.powers import first_time
from cohortflow.markov.structure import Structure, structure_of

_SAME_LAW = 1e-12
_FINEST = 1e-12


def stationary(P: ArrayLike) -> Array:
    """The stationary law, shape (K,), of a chain with one closed class, periodic or not; 0 if transient.

    Each entry is accurate relative to its own size, also where classes are almost uncoupled.
    Raises NotIdentified when there are several closed classes.

    >>> stationary([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]])
    array([0.4, 0.2, 0.4])
    """
    return _only(stationary_laws(P))


def stationary_laws(P: ArrayLike) -> Array:
    """One stationary law for each closed class, shape (classes, K), in the order of `analyse(P).closed`.

    >>> stationary_laws([[0.5, 0.5, 0.0], [0.2, 0.8, 0.0], [0.0, 0.0, 1.0]]).round(4)
    array([[0.2857, 0.7143, 0.    ],
           [0.    , 0.    , 1.    ]])
    """
    matrix = check_stochastic(P)
    return _laws(matrix, structure_of(matrix))


def absorption_into_classes(P: ArrayLike) -> Array:
    """Probability of ending in each closed class, shape (K, classes), from each state.

    >>> absorption_into_classes([[1.0, 0.0, 0.0], [0.25, 0.5, 0.25], [0.0, 0.0, 1.0]])
    array([[1. , 0. ],
           [0.5, 0.5],
           [0. , 1. ]])
    """
    matrix = check_stochastic(P)
    return _ends(matrix, structure_of(matrix))


def time_average_matrix(P: ArrayLike) -> Array:
    """A, shape (K, K): share of time spent in column, in the long run, from row. Always exists.

    >>> time_average_matrix([[0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.5, 0.0, 0.5]])
    array([[0.5, 0.5, 0. ],
           [0.5, 0.5, 0. ],
           [0.5, 0.5, 0. ]])
    """
    return _average(check_stochastic(P))


def limit_matrix(P: ArrayLike) -> Array:
    """lim P^n, shape (K, K). Raises NotIdentified when a closed class is periodic.

    >>> limit_matrix([[1.0, 0.0, 0.0], [0.25, 0.5, 0.25], [0.0, 0.0, 1.0]])
    array([[1. , 0. , 0. ],
           [0.5, 0. , 0.5],
           [0. , 0. , 1. ]])
    """
    matrix = check_stochastic(P)
    parts = structure_of(matrix)
    for group, length in zip(parts.closed, parts.periods, strict=True):
        if length > 1:
            raise NotIdentified(
                f"the closed class {group} has period {length}: the mix there cycles and P^n has no limit; "
                "ask cycle_limits for the laws of the cycle, or time_average_matrix for their average"
            )
    return _average(matrix, parts)


def cycle_limits(P: ArrayLike, start: ArrayLike) -> Array:
    """The laws between which the mix cycles in the end, shape (d, K); d = 1 is an ordinary limit.

    Row k is lim_n start P^(n d + k); d is the least common multiple of the periods of the closed classes that
    the start can reach. start: a law (K,) or the index of a state.

    >>> cycle_limits([[0.0, 1.0, 0.0], [0.5, 0.0, 0.5], [0.0, 1.0, 0.0]], 0)
    array([[0.5, 0. , 0.5],
           [0. , 1. , 0. ]])
    """
    matrix = check_stochastic(P)
    return _cycle(matrix, check_start(start, len(matrix)), structure_of(matrix))


def limit_from_start(P: ArrayLike, start: ArrayLike) -> Array:
    """lim start P^n, shape (K,), for a start law or state. Raises NotIdentified when the mix cycles for ever.

    >>> limit_from_start([[1.0, 0.0, 0.0], [0.25, 0.5, 0.25], [0.0, 0.0, 1.0]], [0.0, 0.5, 0.5])
    array([0.25, 0.  , 0.75])
    """
    matrix = check_stochastic(P)
    return _limit(matrix, check_start(start, len(matrix)), structure_of(matrix))


def deviation_matrix(P: ArrayLike) -> Array:
    """D = (I - P)^#, shape (K, K): extra expected time in column, over the long run's share, from row.

    Built block by block. In a closed class D = (I - 1 pi') G (I - 1 pi'), with G the inverse of I - P
    without one state; between transient states D = N = (I - Q)^{-1}; from them to a class D = N (R
    D_class - A).

    >>> deviation_matrix([[0.5, 0.5, 0.0], [0.25, 0.75, 0.0], [0.0, 0.5, 0.5]]).round(6)
    array([[ 0.888889, -0.888889,  0.      ],
           [-0.444444,  0.444444,  0.      ],
           [-1.111111, -0.888889,  2.      ]])
    """
    matrix = check_stochastic(P)
    return _deviation(matrix, structure_of(matrix))


def fundamental_matrix(P: ArrayLike) -> Array:
    """Z = (I - P + A)^{-1} = D + A, shape (K, K).

    >>> (75 * fundamental_matrix([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]])).round(9)
    array([[ 86.,   3., -14.],
           [  6.,  63.,   6.],
           [-14.,   3.,  86.]])
    """
    matrix = check_stochastic(P)
    parts = structure_of(matrix)
    return _deviation(matrix, parts) + _average(matrix, parts)


def kemeny_constant(P: ArrayLike) -> float:
    """K = tr Z = 1 + sum_{k>1} 1 / (1 - lambda_k): one more than the mean time to a state drawn from pi.

    Raises NotIdentified when there are several closed classes (some states are never met).

    >>> round(kemeny_constant([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]]) * 15, 9)
    47.0
    """
    matrix = check_stochastic(P)
    parts = structure_of(matrix)
    if len(parts.closed) > 1:
        raise NotIdentified(
            f"there are {len(parts.closed)} closed classes: from one of them the states of another are "
            "never met, so the mean time to a state drawn from the long-run mix is not finite; "
            "take one class at a time"
        )
    return float(np.trace(_deviation(matrix, parts)) + 1.0)


def second_eigenvalue_modulus(P: ArrayLike) -> float:
    """Largest modulus among the eigenvalues of P besides the 1 that belongs to each closed class.

    The factor by which the distance to the long run shrinks a period, in the end; 1 for periodic classes.

    >>> round(second_eigenvalue_modulus([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]]), 9)
    0.25
    """
    matrix = check_stochastic(P)
    return float(np.abs(np.linalg.eigvals(matrix - _average(matrix))).max())


def periods_to_settle(P: ArrayLike, start: ArrayLike, *, tolerance: float = 0.01) -> float:
    """First t from which start P^t stays within `tolerance` of its limit, in total variation.

    Total variation 1/2 sum |difference| never grows along a chain, so the first time is also the last.
    Infinite (math.inf) when the mix cycles for ever: `limit_from_start` then says why. tolerance: 1e-12
    to 1.

    >>> periods_to_settle([[0.9, 0.1], [0.3, 0.7]], 0, tolerance=0.01)
    7.0
    """
    if not _FINEST <= tolerance < 1:
        raise CallError(f"tolerance is {tolerance!r}; it must be at least {_FINEST:g} and below 1")
    matrix = check_stochastic(P)
    law = check_start(start, len(matrix))
    try:
        limit = _limit(matrix, law, structure_of(matrix))
    except NotIdentified:
        return math.inf
    away = first_time(matrix, law[None, :], lambda mix: 0.5 * np.abs(mix - limit).sum(axis=1) <= tolerance)
    return float(away[0])


def law_and_deviation(matrix: Array) -> tuple[Array, Array]:
    """pi (K,) and D (K, K) of a checked chain with one closed class. Raises NotIdentified if it has several.

    >>> law, away = law_and_deviation(np.array([[0.9, 0.1], [0.3, 0.7]]))
    >>> law.round(4), away.round(4).tolist()
    (array([0.75, 0.25]), [[0.625, -0.625], [-1.875, 1.875]])
    """
    parts = structure_of(matrix)
    return _only(_laws(matrix, parts)), _deviation(matrix, parts)


def _only(laws: Array) -> Array:
    if len(laws) > 1:
        raise NotIdentified(
            f"there are {len(laws)} closed classes, so no single stationary law: the long-run mix depends on "
            "the start; ask stationary_laws for one law a class, or limit_from_start with a start"
        )
    return laws[0]


def _laws(matrix: Array, parts: Structure) -> Array:
    laws = np.zeros((len(parts.closed), len(matrix)))
    for law, group in zip(laws, parts.closed, strict=True):
        law[list(group)] = _class_law(matrix[grid(group, group)])
    return laws


def _class_law(block: Array) -> Array:
    return eliminate(block, np.zeros(len(block))).left_null()


def _ends(matrix: Array, parts: Structure) -> Array:
    ends = np.zeros((len(matrix), len(parts.closed)))
    for column, group in enumerate(parts.closed):
        ends[list(group), column] = 1.0
    if parts.transient:
        out = list(parts.transient)
        entering = np.column_stack([matrix[grid(out, group)].sum(axis=1) for group in parts.closed])
        ends[out] = eliminate(matrix[grid(out, out)], entering.sum(axis=1)).solve(entering)
    return ends


def _average(matrix: Array, parts: Structure | None = None) -> Array:
    parts = parts or structure_of(matrix)
    return _ends(matrix, parts) @ _laws(matrix, parts)


def _cycle(matrix: Array, start: Array, parts: Structure) -> Array:
    reached = np.any(parts.reachable[start > 0], axis=0).tolist()
    length = math.lcm(*(d for d, group in zip(parts.periods, parts.closed, strict=True) if reached[group[0]]))
    laws = np.empty((length, len(matrix)))
    laws[0] = start @ _average(np.linalg.matrix_power(matrix, length))
    for k in range(1, length):
        laws[k] = laws[k - 1] @ matrix
    return laws


def _limit(matrix: Array, start: Array, parts: Structure) -> Array:
    laws = _cycle(matrix, start, parts)
    if np.abs(laws - laws[0]).max() > _SAME_LAW:
        raise NotIdentified(
            f"from this start the mix cycles through {len(laws)} laws and never settles; "
            "ask cycle_limits for them, or time_average_matrix for their average"
        )
    return laws.mean(axis=0)


def _deviation(matrix: Array, parts: Structure) -> Array:
    out = np.zeros_like(matrix)
    laws, ends = _laws(matrix, parts), _ends(matrix, parts)
    away = list(parts.transient)
    if away:
        leaving = np.delete(matrix[away], away, axis=1).sum(axis=1)
        steps = eliminate(matrix[grid(away, away)], leaving)
        out[grid(away, away)] = steps.inverse()
    for column, group in enumerate(parts.closed):
        inside = grid(group, group)
        law = laws[column, list(group)]
        out[inside] = _class_deviation(matrix[inside], law)
        if away:
            pull = matrix[grid(away, group)] @ out[inside] - np.outer(ends[away, column], law)
            out[grid(away, group)] = out[grid(away, away)] @ pull
    return out


def _class_deviation(block: Array, law: Array) -> Array:
    pivot = int(law.argmax())
    rest = [i for i in range(len(block)) if i != pivot]
    inverse = np.zeros_like(block)
    if rest:
        inverse[grid(rest, rest)] = eliminate(block[grid(rest, rest)], block[rest, pivot]).inverse()
    centred = inverse - law @ inverse
    return centred - np.outer(centred.sum(axis=1), law)
