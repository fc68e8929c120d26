r"""Elimination without subtraction: solves with I - Q that keep every digit, however weak the way out.

State k is taken out by sending whoever stands there straight on to where the next moves lead. With
S_k = sum_{j<k} q_kj + e_k (moves on to states still in, plus the way out):

    q_ij <- q_ij + q_ik q_kj / S_k,     e_i <- e_i + q_ik e_k / S_k        (i, j < k; k = m-1, ..., 0)

which factors  D - Q = U L  (D: row totals of moves and ways out), U unit upper, L lower triangular, neither
with a positive off-diagonal. The diagonal 1 - q_kk is never formed, nothing is subtracted, and each entry
of the inverse has a small relative error, even for couplings of 1e-12.

Source: Grassmann, Taksar & Heyman (1985), Operations Research 33(5); O'Cinneide (1993), Numerische
Mathematik 65; Alfa, Xue & Ye (2002), Mathematics of Computation 71 (the case with a way out).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from cohortflow.markov.arguments import Array

_LARGE = 1e150
_PANEL = 16


@dataclass(frozen=True, eq=False)
class Elimination:
    """The factors of D - Q = U L for m states; every solve expects right-hand sides that are not negative.

    >>> moves = np.array([[0.5, 0.2, 0.1], [0.3, 0.4, 0.1], [0.0, 0.6, 0.3]])
    >>> step = eliminate(moves, np.array([0.2, 0.2, 0.1]))
    >>> step.solve(np.ones(3)).round(6)            # mean periods until the way out is taken
    array([5.333333, 5.333333, 6.      ])
    """

    upper: Array
    lower: Array

    def solve(self, right: Array) -> Array:
        """x with (D - Q) x = right; right has shape (m,) or (m, r)."""
        return solve_triangular(
            self.lower,
            solve_triangular(self.upper, right, unit_diagonal=True, check_finite=False),
            lower=True,
            check_finite=False,
        )

    def solve_left(self, left: Array) -> Array:
        """x with x (D - Q) = left; left has shape (m,) or (r, m), rows being row vectors."""
        first = solve_triangular(self.lower, left.T, lower=True, trans="T", check_finite=False)
        return solve_triangular(self.upper, first, trans="T", unit_diagonal=True, check_finite=False).T

    def inverse(self) -> Array:
        """(D - Q)^{-1}, shape (m, m), no entry negative."""
        return self.solve(np.eye(len(self.lower)))

    def left_null(self) -> Array:
        """The law pi with pi (D - Q) = 0 when there is no way out at all (one class)."""
        shares = -self.upper
        law = np.zeros(len(shares))
        law[0] = 1.0
        for k in range(1, len(law)):
            law[k] = law[:k] @ shares[:k, k]
            if law[k] > _LARGE:  # a long chain with a steep slope: keep the top in range
                law[: k + 1] /= law[k]
        return law / law.sum()


def eliminate(moves: Array, leaving: Array) -> Elimination:
    """Factor D - Q from the moves (m, m; the diagonal is not read) and the ways out (m,), all non-negative.

    Every state but the first must have a path to an earlier state or to a way out.
    """
    work, ways_out = moves.copy(), leaving.copy()
    totals = np.empty(len(work))
    for high in range(len(work), 0, -_PANEL):
        low = max(high - _PANEL, 0)
        for k in range(high - 1, low - 1, -1):
            totals[k] = work[k, :k].sum() + ways_out[k]
            if k:
                work[:k, k] /= totals[k]
                work[:k, low:k] += np.outer(work[:k, k], work[k, low:k])
                work[low:k, :low] += np.outer(work[low:k, k], work[k, :low])
                ways_out[low:k] += work[low:k, k] * ways_out[k]
        # the states before the panel take the whole panel's moves in one product
        work[:low, :low] += work[:low, low:high] @ work[low:high, :low]
        ways_out[:low] += work[:low, low:high] @ ways_out[low:high]
    return Elimination(upper=-np.triu(work, 1), lower=np.diag(totals) - np.tril(work, -1))
