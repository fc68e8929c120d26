"""A generator from states seen at uneven times: maximum likelihood with an analytic gradient.

    l(Q) = sum_w sum_ij N_ij(w) log P_ij(w),    P(w) = exp(Q w),    N_ij(w) seen in i, and in j a time w later

With M = N / P, the gradient for all rates at once is the adjoint of the exponential's derivative,
dl/dQ = sum_w int_0^w exp(Q's) M(w) exp(Q'(w-s)) ds, taken in the eigenvectors of Q with divided differences,
or, where these are ill-conditioned, from one block exponential a gap. An exit whose date is known adds
log sum_m P_im(w) q_mD. Rates are sought as logs by BFGS; the errors come from the observed information.

Sources: Kalbfleisch & Lawless (1985) JASA 80, 863; Van Loan (1978) IEEE Trans. Automatic Control 23, 395.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from scipy import special
from scipy.linalg import expm
from scipy.optimize import minimize

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.exact_rates import ExactRates, closed, state_codes
from cohortflow.estimator.interval import check_level
from cohortflow.states import States

Array = NDArray[np.float64]

ILL_CONDITIONED = 1e7
NEVER = 1e-7  # a rate below this share of its state's largest is reported as at zero
COLUMNS = ("from", "to", "gap")


@dataclass(frozen=True, eq=False)
class Panel:
    """Sightings by gap: gaps (W,), counts (W, K, K) of later sightings, dated (W, K, K) of exits with their date."""

    gaps: Array
    counts: Array
    dated: Array

    @classmethod
    def of_frame(cls, frame: pd.DataFrame, states: States) -> Panel:
        """From columns from, to, gap, optional n and dated (true: the move into the exit `to` has its date)."""
        missing = [c for c in COLUMNS if c not in frame.columns]
        if missing:
            raise CallError(
                f"Sightings need the columns {', '.join(COLUMNS)}; {', '.join(missing)} is missing."
            )
        gap = frame["gap"].to_numpy(float)
        if not (gap > 0).all() or not np.isfinite(gap).all():
            raise CallError("The gap between two sightings is a time above 0; some are not.")
        origin, target = (state_codes(frame[c], states) for c in ("from", "to"))
        if (origin < 0).any() or (target < 0).any():
            raise CallError("Every sighting has a state before and after; some are missing.")
        n = frame["n"].to_numpy(float) if "n" in frame else np.ones(len(frame))
        dated = frame["dated"].to_numpy(bool) if "dated" in frame else np.zeros(len(frame), bool)
        if (dated & ~states.exit_mask[target]).any():
            raise CallError("Only moves into an exit can be dated; others are seen at the end of the gap.")
        gaps, where = np.unique(gap, return_inverse=True)
        size = len(states)
        counts, exact = np.zeros((len(gaps), size, size)), np.zeros((len(gaps), size, size))
        np.add.at(counts, (where[~dated], origin[~dated], target[~dated]), n[~dated])
        np.add.at(exact, (where[dated], origin[dated], target[dated]), n[dated])
        return cls(gaps, counts, exact)

    def crude(self, moves: NDArray[np.bool_]) -> Array:
        """(K, K) moves over time spent, as if every move were seen and half its gap spent before it."""
        both = self.counts + self.dated
        changed = both * ~np.eye(len(moves), dtype=bool)
        time = (self.gaps[:, None] * (both.sum(axis=2) - changed.sum(axis=2) / 2)).sum(axis=0)
        if (time[moves.any(axis=1)] <= 0).any():
            raise NotIdentified(
                "A state from which moves are allowed was never seen with a later sighting; leave the state "
                "out, or declare no moves from it."
            )
        n = np.where(moves, changed.sum(axis=0) + 0.5, 0.0)
        return n / np.where(time > 0, time, 1.0)[:, None]

    def log_likelihood(self, Q: Array) -> tuple[float, Array]:
        """l(Q) and its (K, K) derivative with respect to every entry of Q, taken as free."""
        P, adjoint = _exponentials(Q, self.gaps)
        P = np.maximum(P, 1e-300)
        value = float((self.counts * np.log(P)).sum())
        M, direct = self.counts / P, np.zeros_like(Q)
        if self.dated.any():
            into = np.where(np.eye(len(Q), dtype=bool), 0.0, Q)
            density = np.maximum(P @ into, 1e-300)
            value += float((self.dated * np.log(density)).sum())
            weight = self.dated / density
            M = M + weight @ into.T
            direct = np.einsum("wim,wid->md", P, weight) * ~np.eye(len(Q), dtype=bool)
        return value, adjoint(M) + direct


def generator_from_panel(
    sightings: pd.DataFrame,
    states: States,
    *,
    moves: ArrayLike | None = None,
    level: float = 0.95,
    unit: str = "period",
) -> ExactRates:
    """The generator with the highest likelihood.

    sightings : columns from, to, gap, optional n and dated (see Panel.of_frame)
    moves : (K, K) bool, which direct moves there are; default all that are not declared impossible

    `settings` of the result: converged, iterations, log_likelihood, gradient (largest entry, relative). Notes:
    "not_converged", "at_zero:a>b" (the likelihood wants no such move), "flat" (the information is singular).
    CallError for unusable sightings; NotIdentified for a state without any.

    >>> seen = pd.DataFrame({"from": ["on"] * 2 + ["paused"] * 2, "to": ["on", "off", "on", "paused"],
    ...                      "gap": [1.0, 1.0, 2.0, 2.0], "n": [90, 10, 30, 70]})
    >>> states = States(["on", "paused", "off"], exits=["off"])
    >>> moves = [[0, 0, 1], [1, 0, 0], [0, 0, 0]]
    >>> generator_from_panel(seen, states, moves=moves).Q.round(3)[0].tolist()
    [-0.079, 0.0, 0.079]
    """
    check_level(level)
    panel, size = Panel.of_frame(sightings, states), len(states)
    allowed = states.allowed & ~np.eye(size, dtype=bool)
    if moves is not None:
        allowed &= np.asarray(moves, dtype=bool)
    scale = float((panel.gaps * (panel.counts + panel.dated).sum(axis=(1, 2))).sum())
    scale /= float((panel.counts + panel.dated).sum())
    scaled = Panel(panel.gaps / scale, panel.counts, panel.dated)
    cells = np.nonzero(allowed)
    start = np.log(scaled.crude(allowed)[cells])
    total = float((panel.counts + panel.dated).sum())

    def loss(x: Array) -> tuple[float, Array]:
        value, slope = _at(scaled, x, cells, size)
        return -value / total, -slope / total

    found = minimize(loss, start, jac=True, method="BFGS", options={"gtol": 1e-8, "maxiter": 1000})
    Q = _generator(found.x, cells, size)
    information = _information(loss, found.x) * total
    covariance, flat = _inverse(information)
    largest = float(np.abs(found.jac).max())
    notes = _notes(Q, cells, states, largest < 1e-5, flat)
    whole = np.zeros((size * size, size * size))
    flat_cells = cells[0] * size + cells[1]
    whole[np.ix_(flat_cells, flat_cells)] = covariance
    z = float(special.ndtri((1 + level) / 2))
    wide = np.exp(np.minimum(z * np.sqrt(np.diag(whole)).reshape(size, size), 500))
    rates = np.where(allowed, Q / scale, 0.0)
    settings: dict[str, Any] = {
        "converged": largest < 1e-5,
        "iterations": int(found.nit),
        "log_likelihood": -float(found.fun) * total - float(panel.dated.sum()) * np.log(scale),
        "gradient": largest,
    }
    unseen = np.full((size, size), np.nan)
    return ExactRates(
        states, closed(rates), allowed, unseen, np.full(size, np.nan), whole, rates / wide, rates * wide, level,
        unit, "likelihood", notes, settings,
    )  # fmt: skip


def _at(panel: Panel, x: Array, cells: tuple[Any, ...], size: int) -> tuple[float, Array]:
    """l and its gradient with respect to the logs of the rates."""
    Q = _generator(x, cells, size)
    value, slope = panel.log_likelihood(Q)
    return value, (slope[cells] - slope[cells[0], cells[0]]) * Q[cells]


def _generator(x: Array, cells: tuple[Any, ...], size: int) -> Array:
    rates = np.zeros((size, size))
    rates[cells] = np.exp(np.clip(x, -60, 12))
    return closed(rates)


def _exponentials(Q: Array, gaps: Array) -> tuple[Array, Any]:
    """P(w) of every gap, and the map from (W, K, K) weights M to dl/dQ (see the module text)."""
    values, vectors = np.linalg.eig(Q)
    if np.linalg.cond(vectors) > ILL_CONDITIONED:
        return expm(Q[None] * gaps[:, None, None]), lambda M: _block_adjoint(Q, gaps, M)
    inverse = np.linalg.inv(vectors)
    grown = np.exp(values[None] * gaps[:, None])
    P = ((vectors[None] * grown[:, None, :]) @ inverse).real
    gap = values[:, None] - values[None, :]
    near = np.abs(gap) < 1e-9
    divided = (grown[:, :, None] - grown[:, None, :]) / np.where(near, 1.0, gap)
    divided = np.where(near, gaps[:, None, None] * grown[:, :, None], divided)

    def adjoint(M: Array) -> Array:
        inner = ((vectors.T @ M @ inverse.T) * divided).sum(axis=0)
        return (inverse.T @ inner @ vectors.T).real

    return P, adjoint


def _block_adjoint(Q: Array, gaps: Array, M: Array) -> Array:
    size = len(Q)
    block = np.zeros((len(gaps), 2 * size, 2 * size))
    block[:, :size, :size] = block[:, size:, size:] = Q.T * gaps[:, None, None]
    block[:, :size, size:] = M * gaps[:, None, None]
    return expm(block)[:, :size, size:].sum(axis=0)


def _information(loss: Any, x: Array) -> Array:
    """Second derivatives by central differences of the analytic gradient."""
    step = 1e-5
    rows = [(loss(x + step * e)[1] - loss(x - step * e)[1]) / (2 * step) for e in np.eye(len(x))]
    return (np.array(rows) + np.array(rows).T) / 2


def _inverse(information: Array) -> tuple[Array, bool]:
    values, vectors = np.linalg.eigh(information)
    kept = values > 1e-8 * values[-1]
    return (vectors[:, kept] / values[kept]) @ vectors[:, kept].T, not bool(kept.all())


def _notes(Q: Array, cells: tuple[Any, ...], states: States, converged: bool, flat: bool) -> tuple[str, ...]:
    notes = [] if converged else ["not_converged"]
    largest = np.where(np.eye(len(Q), dtype=bool), 0.0, Q).max(axis=1)
    for i, j in zip(*cells, strict=True):
        if Q[i, j] < NEVER * largest[i]:
            notes.append(f"at_zero:{states.names[i]}>{states.names[j]}")
    return tuple([*notes, "flat"] if flat else notes)
