r"""The nearest generator to a logarithm that is none: three ways, row by row, each with its distance.

    diagonal       negative rates become 0; the diagonal takes the difference
    weighted       negative rates become 0; the difference is spread over the rest of the row by size
    quasi_optimal  the row closest in squares: subtract the mean over the active entries, drop the negative,
                   repeat (the Euclidean projection on rows that sum to 0 with no negative rate)

A row that is a generator row comes back unchanged, whichever way.

Source: Israel, Rosenthal & Wei (2001), Mathematical Finance 11(2) (diagonal and weighted adjustment);
Kreinin & Sidelnikova (2001), Algo Research Quarterly 4 (quasi-optimisation); Davies (2010), Electronic J.
Probability 15.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError, nearest
from cohortflow.markov.arguments import ROW_TOLERANCE, Array, read_only
from cohortflow.markov.rates import check_rates


@dataclass(frozen=True, eq=False)
class Repair:
    """A generator in place of a logarithm.

    generator      (K, K)
    by             the way it was made
    distance       root of the sum of squared differences
    row_distance   (K,) the same for each row; 0 for rows that were left alone
    """

    generator: Array
    by: str
    distance: float
    row_distance: Array


def repair(logarithm: ArrayLike, *, by: str = "quasi_optimal") -> Repair:
    """A generator near a matrix (K, K) whose rows sum to 0. Raises CallError for NaN or rows that do not.

    >>> repair([[-0.3, 0.4, -0.1], [0.2, -0.2, 0.0], [0.1, 0.1, -0.2]]).generator.round(4)
    array([[-0.35,  0.35,  0.  ],
           [ 0.2 , -0.2 ,  0.  ],
           [ 0.1 ,  0.1 , -0.2 ]])
    """
    if by not in _WAYS:
        raise CallError(f"by is {by!r}; it must be one of {', '.join(_WAYS)}{nearest(by, _WAYS)}")
    log = check_rates(logarithm, "logarithm")
    for row in np.flatnonzero(
        np.abs(log.sum(axis=1)) > ROW_TOLERANCE * np.maximum(np.abs(log).sum(axis=1), 1.0)
    ):
        raise CallError(
            f"row {row} of the logarithm sums to {log[row].sum():.6g}, not to 0: it is no logarithm of a "
            "matrix whose rows sum to 1"
        )
    mended = np.array([row if _is_rates(row, i) else _WAYS[by](row, i) for i, row in enumerate(log)])
    apart = np.sqrt(((mended - log) ** 2).sum(axis=1))
    return Repair(read_only(mended), by, float(np.sqrt((apart**2).sum())), read_only(apart))


def _is_rates(row: Array, place: int) -> bool:
    return bool((np.delete(row, place) >= 0).all())


def _diagonal(row: Array, place: int) -> Array:
    rates = np.clip(row, 0.0, None)
    rates[place] = 0.0
    rates[place] = -rates.sum()
    return rates


def _weighted(row: Array, place: int) -> Array:
    negative = (row < 0) & (np.arange(len(row)) != place)
    size = np.where(negative, 0.0, np.abs(row))
    return _diagonal(np.where(negative, 0.0, row + row[negative].sum() * size / size.sum()), place)


def _quasi_optimal(row: Array, place: int) -> Array:
    active = np.ones(len(row), dtype=bool)
    while True:
        rates = np.where(active, row - row[active].mean(), 0.0)
        below = (rates < 0) & (np.arange(len(row)) != place)
        if not below.any():
            return rates
        active &= ~below


_WAYS: dict[str, Callable[[Array, int], Array]] = {
    "diagonal": _diagonal,
    "weighted": _weighted,
    "quasi_optimal": _quasi_optimal,
}
