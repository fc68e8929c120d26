r"""Derivatives with respect to the entries of a matrix, kept as few vectors; and the variances they lead to.

    dF_t / dP_ij = sum_r left[r, t, i] right[r, t, j]  (+ rows[t, i] cells[i, j])

is the element-wise partial derivative, every entry of P moving freely. Only directions that keep row sums
have a meaning for a chain; covariances of estimated rows lie in them, so nothing need be projected out.

    Var F = sum g_ij Cov(P_ij, P_kl) g_kl                                   delta method
          = sum_i [ sum_j p_ij g_ij^2 - (sum_j p_ij g_ij)^2 ] / n_i         multinomial rows, n_i at risk

Source: Cramer (1946), Mathematical Methods of Statistics, ch. 28 (delta method).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cohortflow.errors import CallError
from cohortflow.markov.arguments import Array, check_start, check_stochastic, check_vector


@dataclass(frozen=True, eq=False)
class Derivative:
    """T numbers and their derivative with respect to a K x K matrix.

    value  (T,)
    left   (r, T or 1, K), over the `from` index; a middle length of 1 is shared by all targets
    right  (r, T or 1, K), over the `to` index
    rows   (T or 1, K) and cells (K, K): a term of the form rows[t, i] cells[i, j], or None

    >>> d = Derivative(np.array([3.0, 4.0]), np.array([[[1.0, 2.0]]]), np.array([[[1.0, 0.0], [0.0, 1.0]]]))
    >>> d.gradient(0).tolist(), d.full().shape
    ([[1.0, 0.0], [2.0, 0.0]], (2, 2, 2))
    """

    value: Array
    left: Array
    right: Array
    rows: Array | None = None
    cells: Array | None = None

    def gradient(self, target: int = 0) -> Array:
        """(K, K) derivative of one target."""
        chosen = np.zeros(len(self.value))
        chosen[target] = 1.0
        return self.along(chosen)

    def along(self, weights: ArrayLike) -> Array:
        """(K, K) derivative of the sum of weights[t] F_t."""
        chosen = check_vector(weights, len(self.value), name="weights")
        used = np.flatnonzero(chosen)
        if not used.size:
            return np.zeros((self.left.shape[-1], self.right.shape[-1]))
        left = _some(self.left, used) * chosen[used][None, :, None]
        right = np.broadcast_to(_some(self.right, used), left.shape[:2] + self.right.shape[-1:])
        found = left.reshape(-1, left.shape[-1]).T @ right.reshape(-1, right.shape[-1])
        if self.rows is not None and self.cells is not None:
            found += (chosen[used] @ _some(self.rows[None], used)[0])[:, None] * self.cells
        return found

    def full(self) -> Array:
        """(T, K, K) derivatives of all targets; for many states ask for single targets instead."""
        return np.stack([self.gradient(target) for target in range(len(self.value))])


def joined(parts: Sequence[Derivative]) -> Derivative:
    """One derivative out of several of the same targets, for a matrix that acts at several places.

    >>> once = Derivative(np.array([1.0]), np.ones((1, 1, 2)), np.ones((1, 1, 2)))
    >>> joined([once, once]).gradient(0)
    array([[2., 2.],
           [2., 2.]])
    """
    return Derivative(
        parts[0].value,
        np.concatenate([part.left for part in parts]),
        np.concatenate([part.right for part in parts]),
    )


def delta_variance(gradient: ArrayLike, covariance: ArrayLike) -> float:
    """Variance of a number with this gradient (K, K) when the matrix has this covariance.

    covariance: (K, K, K, K) with Cov(P_ij, P_kl) at [i, j, k, l], the same as (K*K, K*K), or (K, K, K)
    when the rows are independent, Cov(P_ij, P_il) at [i, j, l].

    >>> rows = np.array([[[0.0025, -0.0025], [-0.0025, 0.0025]], [[0.0, 0.0], [0.0, 0.0]]])
    >>> delta_variance([[1.0, 3.0], [0.0, 0.0]], rows)
    0.01
    """
    slope = np.asarray(gradient, dtype=float)
    spread = np.asarray(covariance, dtype=float)
    size = slope.shape[0]
    if slope.shape != (size, size):
        raise CallError(f"gradient has shape {slope.shape}; it must be (K, K)")
    if spread.shape == (size, size, size):
        return float(np.einsum("ij,ijl,il->", slope, spread, slope))
    if spread.shape not in ((size,) * 4, (size * size,) * 2):
        raise CallError(
            f"covariance has shape {spread.shape}; for {size} states it must be {(size,) * 4}, "
            f"{(size * size,) * 2} or {(size,) * 3}"
        )
    flat = slope.ravel()
    return float(flat @ spread.reshape(size * size, size * size) @ flat)


def multinomial_variance(gradient: ArrayLike, P: ArrayLike, at_risk: ArrayLike) -> float:
    """Delta variance when each row was estimated from its own at_risk[i] independent moves, shape (K,).

    A row with nobody at risk counts only if the gradient varies over it; the variance is then NaN.

    >>> multinomial_variance([[1.0, 3.0], [0.0, 0.0]], [[0.5, 0.5], [0.0, 1.0]], [100, 0])
    0.01
    """
    matrix = check_stochastic(P)
    counts = check_vector(at_risk, len(matrix), name="at_risk")
    slope = np.asarray(gradient, dtype=float)
    if slope.shape != matrix.shape:
        raise CallError(f"gradient has shape {slope.shape}; it must be that of P, {matrix.shape}")
    if (counts < 0).any():
        raise CallError(f"at_risk holds {counts.min():g}; numbers of customers at risk are never negative")
    centre = (matrix * slope).sum(axis=1, keepdims=True)
    each = (matrix * (slope - centre) ** 2).sum(axis=1)
    unseen = (counts == 0) & (np.ptp(slope, axis=1) > 0)
    if unseen.any():
        return math.nan
    seen = counts > 0
    return float((each[seen] / counts[seen]).sum())


def base_row(start: ArrayLike, states: int) -> Array:
    """Shares or counts (K,) to start from, or the index of one state; any finite numbers will do.

    >>> base_row([120, 40, 0], 3)
    array([120.,  40.,   0.])
    """
    if np.ndim(start) == 0:
        return check_start(start, states)
    return check_vector(start, states, name="start")


def _some(terms: Array, used: NDArray[np.intp]) -> Array:
    """The targets that are used; a shared middle axis stays as it is."""
    return terms if terms.shape[1] == 1 else terms[:, used]
