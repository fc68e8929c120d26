"""Latent types by expectation and maximisation: a mixture of G chains.

    customer u of first group h:   L_ug = w_hg prod_ij p_gij ^ N_uij,     z_ug = L_ug / sum_g L_ug
    w_hg = sum_u z_ug / n_h        p_gij proportional to sum_u z_ug N_uij + prior p_ij

Membership may depend on the group (first state; already there or joined). The prior is a fraction of a move a
cell, spread as the pooled rates, against rows of 0 and 1. A type may be held at the identity: it never moves.
Steps are stretched (SQUAREM) and taken back whenever the penalised likelihood falls, so it never does.

Sources: Dempster, Laird & Rubin (1977) J. R. Stat. Soc. B 39, 1; Varadhan & Roland (2008) Scand. J. Statist.
35, 335.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohortflow.estimator.patterns import Patterns

Array = NDArray[np.float64]

TINY = 1e-300
TOLERANCE = 1e-4  # of log-likelihood, far below what one customer weighs
MOST_ROUNDS = 400


@dataclass(frozen=True, eq=False)
class Types:
    """P : (G, K, K) rates of each type;  share : (H, G) memberships;  fixed : type at the identity or -1
    score : penalised log-likelihood;  loglik : without the prior;  rounds, converged : how the search ended
    """

    P: Array
    share: Array
    fixed: int = -1
    score: float = -np.inf
    loglik: float = -np.inf
    rounds: int = 0
    converged: bool = False

    @property
    def count(self) -> int:
        """G."""
        return len(self.P)


@dataclass(frozen=True, eq=False)
class _Seen:
    """Types with the memberships z (U, G) and the scores that they give."""

    types: Types
    z: Array
    loglik: float
    score: float


def log_joint(patterns: Patterns, types: Types) -> Array:
    """(U, G) log of share times likelihood."""
    rates = types.P[:, patterns.cells[:, 0], patterns.cells[:, 1]]
    share = np.log(np.maximum(types.share, TINY))
    return share[patterns.group] + patterns.moves @ np.log(np.maximum(rates, TINY)).T


def membership(patterns: Patterns, types: Types) -> tuple[Array, float]:
    """(U, G) posterior membership of each pattern, and the log-likelihood of all customers."""
    joint = log_joint(patterns, types)
    top = joint.max(axis=1, keepdims=True)
    z = np.exp(joint - top)
    total = z.sum(axis=1, keepdims=True)
    return z / total, float(patterns.n @ (top + np.log(total))[:, 0])


def run(
    patterns: Patterns,
    start: Types,
    *,
    prior: float,
    rounds: int = MOST_ROUNDS,
    tolerance: float = TOLERANCE,
) -> Types:
    """From a start until the penalised log-likelihood gains less than `tolerance`, or `rounds`."""
    weight = _prior_weight(patterns, prior)
    now = _look(patterns, start, weight)
    for k in range(1, rounds + 1):
        one = _look(patterns, _step(patterns, now, weight), weight)
        two = _look(patterns, _step(patterns, one, weight), weight)
        far = _look(patterns, _stretched(now.types, one.types, two.types), weight)
        best = far if far.score > two.score else two
        done = best.score - now.score <= max(tolerance, 1e-14 * abs(best.score))
        now = best if best.score >= now.score else now
        if done:
            return _finished(now, k, True)
    return _finished(now, rounds, False)


def _finished(seen: _Seen, rounds: int, converged: bool) -> Types:
    return replace(seen.types, score=seen.score, loglik=seen.loglik, rounds=rounds, converged=converged)


def random_start(patterns: Patterns, count: int, rng: np.random.Generator, *, spread: float = 6.0) -> Types:
    """Types drawn around the pooled rates (Dirichlet rows of concentration `spread`), memberships even."""
    pooled = _rows(patterns.table())
    weights = rng.gamma(np.maximum(spread * np.tile(pooled, (count, 1, 1)), 0.0))
    weights = np.where(pooled > 0, np.maximum(weights, 1e-3), 0.0)
    share = np.full((2 * patterns.size, count), 1.0 / count)
    return Types(_rows(weights), share)


def stayer_start(patterns: Patterns) -> Types:
    """Movers with the pooled rates, and a type that never moves."""
    pooled = _rows(patterns.table())
    P = np.stack([pooled, np.eye(patterns.size)])
    return Types(P, np.full((2 * patterns.size, 2), 0.5), fixed=1)


def ordered(types: Types, weight: Array) -> Types:
    """Types from the most to the least persistent (mean probability to stay, weighted by states)."""
    stay = np.einsum("gii,i->g", types.P, weight) / weight.sum()
    order = np.argsort(-stay, kind="stable")
    fixed = int(np.flatnonzero(order == types.fixed)[0]) if types.fixed >= 0 else -1
    return replace(types, P=types.P[order], share=types.share[:, order], fixed=fixed)


def _prior_weight(patterns: Patterns, prior: float) -> Array:
    """(K, K) moves that the prior adds to every type: `prior` a possible cell, spread as the pooled rates."""
    pooled = _rows(patterns.table())
    return prior * pooled * (pooled > 0).sum(axis=1, keepdims=True)


def _look(patterns: Patterns, types: Types, weight: Array) -> _Seen:
    z, loglik = membership(patterns, types)
    free = np.delete(types.P, types.fixed, axis=0) if types.fixed >= 0 else types.P
    penalty = float((weight * np.log(np.maximum(free, TINY))).sum()) if weight.any() else 0.0
    return _Seen(types, z, loglik, loglik + penalty)


def _step(patterns: Patterns, seen: _Seen, weight: Array) -> Types:
    """One expectation and maximisation."""
    types, customers = seen.types, seen.z * patterns.n[:, None]
    P = np.zeros_like(types.P)
    P[:, patterns.cells[:, 0], patterns.cells[:, 1]] = customers.T @ patterns.moves
    P = _rows(P + weight)
    if types.fixed >= 0:
        P[types.fixed] = np.eye(patterns.size)
    groups = len(types.share)
    share = np.stack([np.bincount(patterns.group, c, minlength=groups) for c in customers.T], axis=1)
    total = share.sum(axis=1, keepdims=True)
    known = np.where(total > 0, share / np.maximum(total, TINY), types.share)
    return replace(types, P=P, share=known)


def _stretched(zero: Types, one: Types, two: Types) -> Types:
    """The SQUAREM step in log-probabilities, made probabilities again."""
    logs = [
        np.concatenate([np.log(np.maximum(t.P, TINY)).ravel(), np.log(np.maximum(t.share, TINY)).ravel()])
        for t in (zero, one, two)
    ]
    r, v = logs[1] - logs[0], logs[2] - 2 * logs[1] + logs[0]
    length = float(np.linalg.norm(v))
    alpha = -max(1.0, float(np.linalg.norm(r)) / length) if length > 0 else -1.0
    ahead = logs[0] - 2 * alpha * r + alpha**2 * v
    P, share = np.split(np.clip(ahead, -690, 50), [zero.P.size])
    P = np.where(two.P > 0, np.exp(P.reshape(zero.P.shape)), 0.0)
    P = (
        _rows(P)
        if zero.fixed < 0
        else np.where(np.arange(len(P))[:, None, None] == zero.fixed, two.P, _rows(P))
    )
    weights = np.exp(share.reshape(zero.share.shape))
    return replace(two, P=P, share=weights / weights.sum(axis=1, keepdims=True))


def _rows(weights: Array) -> Array:
    """Rows divided by their sums; rows of zeros stay zeros."""
    total = weights.sum(axis=-1, keepdims=True)
    return np.divide(weights, total, out=np.zeros_like(weights), where=total > 0)
