r"""The effect of one move on a target, compensated by its balance.

With G the derivative of the target F with respect to a row's entries, and c_i = sum_b p_ib G_ib:

    proportional   dF/dd_ij = (G_ij - c_i) / (1 - p_ij)
    named balance  dF/dd_ij = G_ij - sum_b p_ib G_ib / sum_b p_ib
    elasticity     p_ij (dF/dd_ij) / F

In a model with several rows for a state the point is added to each of them, and the elasticity multiplies
each by the same factor.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.projector.mix import filled
from cohortflow.states import States
from cohortflow.whatif.change import PROPORTIONAL
from cohortflow.whatif.landing import landing
from cohortflow.whatif.slopes import slopes
from cohortflow.whatif.target import Target

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Effects:
    """Compensated slopes of a target, row by row of the model.

    rows : (component, (m, K) slopes, (m, K) what the row holds of each declared move), one a matrix
    """

    schedule: Schedule
    value: float
    rows: tuple[tuple[Component, Array, Array], ...]

    @cached_property
    def slope(self) -> Array:
        """(K, K) dF/dd of the declared moves; NaN where there is none."""
        return self._gathered([(part, rows) for part, rows, _ in self.rows])

    @cached_property
    def elasticity(self) -> Array:
        """(K, K) relative change of the target over relative change of the move."""
        weighted = [(part, np.where(held > 0, rows, 0.0) * held) for part, rows, held in self.rows]
        return self._gathered(weighted) / (self.value if self.value else np.nan)

    def _gathered(self, parts: list[tuple[Component, Array]]) -> Array:
        """Rows of the expanded states added up by declared state."""
        states = self.schedule.states
        if len(parts) == 1 and is_declared(parts[0][0], states):
            out = parts[0][1]
        else:
            out = np.zeros((len(states), len(states)))
            for part, rows in parts:
                np.add.at(out, part.report, rows)
        barred = ~states.allowed
        barred[states.exit_mask | states.mask(self.schedule.unknown)] = True
        out[barred] = np.nan
        return out


def effects(target: Target, schedule: Schedule, balance: str | tuple[str, ...]) -> Effects:
    """The compensated slopes of every move."""
    found = slopes(target, schedule)
    rows = [
        (part, *_row_slopes(part, filled(matrix), gradient, schedule.states, balance))
        for part, stack in zip(schedule.components, found.gradients, strict=True)
        for matrix, gradient in zip(part.matrices, stack, strict=True)
    ]
    return Effects(schedule, found.value, tuple(rows))


def is_declared(part: Component, states: States) -> bool:
    """Whether the component's states are the declared ones, in their order."""
    return len(part.report) == len(states) and np.array_equal(part.report, np.arange(len(states)))


def _row_slopes(
    part: Component, matrix: Array, gradient: Array, states: States, balance: str | tuple[str, ...]
) -> tuple[Array, Array]:
    """(m, K) slope of each expanded row, and what it holds of each declared move; `gradient` may be used
    up.
    """
    if is_declared(part, states):
        held, gain = matrix, gradient
        if balance == PROPORTIONAL:
            return _shared(gain, held, _row_sums(matrix, gradient)), held
        paid = np.where(matrix > 0, matrix * gradient, 0.0)
    else:
        fold = part.collapse(len(states))
        held, paid = matrix @ fold, np.where(matrix > 0, matrix * gradient, 0.0) @ fold
        gain = _gains(part, gradient, held, paid, states)
        if balance == PROPORTIONAL:
            return _shared(gain, held, paid.sum(axis=1)), held
    taking = states.mask(balance)
    pool = held[:, taking].sum(axis=1)
    loss = np.divide(paid[:, taking].sum(axis=1), pool, out=np.full(len(pool), np.nan), where=pool > 0)
    out = gain - loss[:, None]
    out[:, taking] = np.nan
    return out, held


def _shared(gain: Array, held: Array, row: Array) -> Array:
    """(gain - row) / (1 - held), in place: a move paid for by the rest of its row."""
    pool = 1.0 - held
    pool[pool <= 0] = np.nan
    gain -= row[:, None]
    gain /= pool
    return gain


def _row_sums(matrix: Array, gradient: Array) -> Array:
    """sum_j p_ij G_ij, in which a slope that is not known counts only where somebody moves."""
    sums = np.einsum("ij,ij->i", matrix, gradient)
    if np.isnan(sums).any():
        sums = np.where(matrix > 0, matrix * gradient, 0.0).sum(axis=1)
    return sums


def _gains(part: Component, gradient: Array, held: Array, paid: Array, states: States) -> Array:
    """(m, K) derivative in the direction of a declared move: along the row's own law, else where it lands."""
    out = np.divide(paid, held, out=np.full_like(held, np.nan), where=held > 0)
    alone = np.bincount(part.report, minlength=len(states)) == 1
    for k in np.flatnonzero(alone):
        out[:, k] = gradient[:, int(np.flatnonzero(part.report == k)[0])]
    matters = np.asarray(gradient.any(axis=1))
    for row, k in np.argwhere((held <= 0) & ~alone & states.allowed[part.report] & matters[:, None]):
        try:
            law = landing(part, states, np.array([row]), states.names[k])[0]
        except NotIdentified:
            continue
        out[row, k] = law[law > 0] @ gradient[row, law > 0]
    out[~matters] = 0.0
    return out
