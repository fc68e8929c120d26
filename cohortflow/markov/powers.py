"""How long until something becomes true of a law: doubling the step, then halving it.

P, P^2, P^4, ... are kept stochastic by dividing each row by its sum after every squaring, so that errors
do not double with the step; a time of 10^12 periods takes 40 products.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from cohortflow.markov.arguments import Array, Flags

_DOUBLINGS = 60


def first_time(matrix: Array, laws: Array, reached: Callable[[Array], Flags]) -> Array:
    """For each law (row), the first t with reached(law P^t), shape (rows,); inf if not within 2^60 periods.

    `reached` maps laws (rows, K) to flags (rows,) and must stay true once it is true.

    >>> first_time(np.array([[0.5, 0.5], [0.0, 1.0]]), np.eye(2), lambda laws: laws[:, 1] >= 0.9)
    array([4., 0.])
    """
    steps = [matrix]
    while len(steps) <= _DOUBLINGS and not reached(laws @ steps[-1]).all():
        steps.append(_renewed(steps[-1] @ steps[-1]))
    times = np.zeros(len(laws))
    waiting = ~reached(laws)
    for exponent in range(len(steps) - 1, -1, -1):
        later = laws @ steps[exponent]
        moved = waiting & ~reached(later)
        laws = np.where(moved[:, None], later, laws)
        times[moved] += 2.0**exponent
    times[waiting] += 1.0
    times[times >= 2.0**_DOUBLINGS] = np.inf
    return times


def _renewed(matrix: Array) -> Array:
    return matrix / matrix.sum(axis=1, keepdims=True)
