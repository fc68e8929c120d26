"""Multinomial logit from grouped counts, with errors robust to customers who differ.

    log p_gj / p_gr = x_g' b_j,     r the most frequent outcome

by Newton's method on counts Y (G, J) of rows that share x (G, p); the general libraries ask for one row a move,
which are millions here. Where a column of x has no count for an outcome that happens elsewhere (separation),
the likelihood has no maximum; a normal prior of standard deviation 5 then holds the estimates, and it is said.

Source: McFadden (1974), in Zarembka (ed.), Frontiers in Econometrics; the sandwich as in covariance.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.errors import NotIdentified

Array = NDArray[np.float64]

MOST_STEPS = 60
PRIOR_SD = 5.0


@dataclass(frozen=True, eq=False)
class Logit:
    """B : (J, p) coefficients, the reference's are 0;  covariance : (J*p, J*p);  reference : position of r
    information : (J*p, J*p) of the likelihood;  converged, separated : what happened;  loglik : at the end
    """

    B: Array
    reference: int
    information: Array
    covariance: Array
    loglik: float
    converged: bool
    separated: tuple[tuple[int, int], ...]

    def rates(self, X: Array) -> Array:
        """(G, J) probabilities at rows of x."""
        return _softmax(X @ self.B.T)


def fit_logit(X: Array, Y: Array, cluster: NDArray[np.int64] | None = None) -> Logit:
    """Fit counts Y (G, J) on x (G, p); `cluster` (G,) groups the rows for the sandwich.

    NotIdentified when a column of x repeats what the others say.

    >>> X = np.array([[1.0, 0.0], [1.0, 1.0]])
    >>> fit_logit(X, np.array([[80.0, 20.0], [60.0, 40.0]])).B.round(4).tolist()
    [[0.0, 0.0], [-1.3863, 0.9808]]
    """
    if np.linalg.matrix_rank(X * (Y.sum(axis=1, keepdims=True) > 0)) < X.shape[1]:
        raise NotIdentified(
            "The covariates repeat each other (one column follows from the rest), so their effects cannot be "
            "told apart; leave one out."
        )
    outcomes, width = Y.shape[1], X.shape[1]
    reference = int(Y.sum(axis=0).argmax())
    free = np.delete(np.arange(outcomes), reference)
    separated = separation(X, Y)
    ridge = 1 / PRIOR_SD**2 if separated else 0.0
    B = np.zeros((outcomes, width))
    value, converged = -np.inf, False
    for _ in range(MOST_STEPS):
        slope, information = _slope(X, Y, B, free)
        held = information + (ridge + 1e-10) * np.eye(len(information))
        step = np.asarray(np.linalg.solve(held, slope - ridge * B[free].ravel()), dtype=float)
        B, new = _climb(X, Y, B, free, step, value, ridge)
        converged = abs(new - value) <= 1e-12 * (1 + abs(new))
        value = new
        if converged:
            break
    _, information = _slope(X, Y, B, free)
    covariance = _sandwich(X, Y, B, free, information + (ridge + 1e-10) * np.eye(len(information)), cluster)
    where = (free[:, None] * width + np.arange(width)).ravel()
    whole, info = (np.zeros((outcomes * width,) * 2) for _ in range(2))
    whole[np.ix_(where, where)], info[np.ix_(where, where)] = covariance, information
    return Logit(B, reference, info, whole, _loglik(X, Y, B), converged, separated)


def separation(X: Array, Y: Array) -> tuple[tuple[int, int], ...]:
    """(outcome, column) pairs of 0/1 columns that hold no count of an outcome seen elsewhere, or hold them all."""
    found = []
    for k in range(X.shape[1]):
        if not np.isin(X[:, k], (0.0, 1.0)).all() or (X[:, k] == 1).all():
            continue
        inside = Y[X[:, k] == 1].sum(axis=0)
        outside = Y[X[:, k] == 0].sum(axis=0)
        missing = (Y.sum(axis=0) > 0) & ((inside == 0) | (outside == 0))
        found += [(int(j), k) for j in np.flatnonzero(missing)]
    return tuple(found)


def _climb(
    X: Array, Y: Array, B: Array, free: NDArray[np.int64], step: Array, value: float, ridge: float
) -> tuple[Array, float]:
    """The Newton step, halved until the penalised likelihood does not fall."""
    for _ in range(30):
        trial = B.copy()
        trial[free] += step.reshape(len(free), -1)
        new = _loglik(X, Y, trial) - 0.5 * ridge * float((trial**2).sum())
        if new >= value:
            return trial, new
        step = step / 2
    return B, value


def _slope(X: Array, Y: Array, B: Array, free: NDArray[np.int64]) -> tuple[Array, Array]:
    p, n = _softmax(X @ B.T)[:, free], Y.sum(axis=1)
    slope = (Y[:, free] - n[:, None] * p).T @ X
    spread = np.einsum("gj,jk->gjk", p, np.eye(len(free))) - np.einsum("gj,gk->gjk", p, p)
    information = np.einsum("g,gjk,ga,gb->jakb", n, spread, X, X, optimize=True)
    size = len(free) * X.shape[1]
    return slope.ravel(), information.reshape(size, size)


def _sandwich(
    X: Array,
    Y: Array,
    B: Array,
    free: NDArray[np.int64],
    information: Array,
    cluster: NDArray[np.int64] | None,
) -> Array:
    bread = np.asarray(np.linalg.inv(information), dtype=float)
    if cluster is None or len(np.unique(cluster)) < 2:
        return bread
    gap = Y[:, free] - Y.sum(axis=1, keepdims=True) * _softmax(X @ B.T)[:, free]
    score = (gap[:, :, None] * X[:, None, :]).reshape(len(X), -1)
    groups, where = np.unique(cluster, return_inverse=True)
    summed = np.zeros((len(groups), score.shape[1]))
    np.add.at(summed, where, score)
    return bread @ (summed.T @ summed * len(groups) / (len(groups) - 1)) @ bread


def _softmax(eta: Array) -> Array:
    weights = np.exp(eta - eta.max(axis=1, keepdims=True))
    return weights / weights.sum(axis=1, keepdims=True)


def _loglik(X: Array, Y: Array, B: Array) -> float:
    eta = X @ B.T
    top = eta.max(axis=1)
    total = top + np.log(np.exp(eta - top[:, None]).sum(axis=1))
    return float((Y * eta).sum() - Y.sum(axis=1) @ total)
