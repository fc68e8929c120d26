"""Where a course settles: the base that constant joiners keep up, or, if nobody joins, what becomes of those
there.

Over a cycle of n matrices M_0 .. M_{n-1} (n = 1 without seasons), with A = M_0 ... M_{n-1}:

    joiners    x_0 (I - A) = c,   c = sum_k j M_{k+1} ... M_{n-1};     x_{k+1} = x_k M_k + j
    nobody     x_0 = begin lim ((I + A) / 2)^t, which is the time average of begin A^t, periodic or not

Figures are averages over the cycle, per period. A base without a way out grows for ever: NaN with that
reason.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.markov.structure import leads_to, reachability
from cohortflow.whatif.course import Course
from cohortflow.whatif.paths import Prices, Step, through

Array = NDArray[np.float64]

SQUARINGS = 60


@dataclass(frozen=True, eq=False)
class Settled:
    """counts (D, K): customers by state, at exits those lost a period; paid, treated (D,) a period; reason:
    code.
    """

    counts: Array
    paid: Array
    treated: Array
    reason: str = ""


def settle(
    course: Course,
    start: Array,
    inflow: Array,
    prices: Prices,
    *,
    draws: Draws | None = None,
    shift: Array | None = None,
) -> Settled:
    """Where it settles when `inflow` (D or 1, K) join in every period, from the opening counts (K,)."""
    size = len(course.schedule.states)
    wide = draws.size if draws is not None else 1
    total = Settled(np.zeros((wide, size)), np.zeros(wide), np.zeros(wide))
    for c in range(len(course.schedule.components)):
        ring = _Ring(Step(course, c, prices, draws, shift))
        reason = ring.endless(inflow.max(axis=0))
        if reason:
            nothing = np.full(wide, np.nan)
            return Settled(np.full((wide, size), np.nan), nothing, nothing, reason)
        ring.add(total, ring.first(start, inflow), inflow)
    return total


class _Ring:
    """The matrices of one component that come round for ever."""

    def __init__(self, step_of: Step) -> None:
        self.step_of, self.part, self.draws = step_of, step_of.part, step_of.draws
        self.states = step_of.course.schedule.states
        season = self.part.tail == "cycle"
        self.begins = max(step_of.course.settled_after, 0 if season else len(self.part.matrices))
        self.length = len(self.part.matrices) if season else 1
        self.exits = self.states.exit_mask[self.part.report]
        c = step_of.component
        self.join = self.part.join[None] if self.draws is None else self.draws.join[c]
        self.opening = self.part.start[None] if self.draws is None else self.draws.start[c]
        self.turns = [step_of(self.begins + k) for k in range(self.length)]

    def product(self, first: int = 0) -> Array:
        """(D or 1, m, m) M_first ... M_{n-1}."""
        out = np.eye(len(self.exits))[None]
        for matrices, _, _ in self.turns[first:]:
            out = out @ matrices
        return out

    def endless(self, inflow: Array) -> str:
        """Why joiners have no settled base: some of them can never leave; or nothing is known about a row."""
        arriving = inflow @ self.join.max(axis=0) > 0
        reached = reachability(self._moves())[arriving].any(axis=0)
        if np.isnan(self.part.matrices).any(axis=(0, 2))[reached].any():
            return "rows_without_data"
        if not arriving.any():
            return ""
        leaving = leads_to(self._moves(), np.flatnonzero(self.exits).tolist())
        return "" if leaving[reached].all() else "grows_without_limit"

    def _moves(self) -> NDArray[np.bool_]:
        return np.asarray(np.stack([(m > 0).any(axis=0) for m, _, _ in self.turns]).any(axis=0))

    def first(self, start: Array, inflow: Array) -> Array:
        """(D, m) customers at the first place of the cycle; nobody in the exits."""
        whole = self.product()
        if not inflow.any():
            return np.where(self.exits, 0.0, through(self._walked(start), _limit(whole)))
        inside = np.flatnonzero(~self.exits)
        arriving = through(inflow, self.join)
        entering = np.sum([through(arriving, self.product(k + 1)) for k in range(self.length)], axis=0)
        system = np.eye(len(inside)) - whole[:, inside[:, None], inside]
        wide = max(len(system), len(entering))
        right = np.broadcast_to(entering[:, inside], (wide, len(inside)))
        out = np.zeros((wide, len(self.exits)))
        out[:, inside] = _solved(np.swapaxes(system, 1, 2), right)
        return out

    def _walked(self, start: Array) -> Array:
        """Where those who are there now stand when the cycle begins."""
        x = through(start[None], self.opening)
        for h in range(self.begins):
            x = through(x, self.step_of(h)[0])
        return x

    def add(self, total: Settled, x: Array, inflow: Array) -> None:
        """Add the averages over the cycle to the totals."""
        fold = self.part.collapse(len(self.states)) / self.length
        arriving = through(inflow, self.join)
        for matrices, money, treated in self.turns:
            total.counts[:] += np.where(self.exits, 0.0, x) @ fold
            total.treated[:] += x @ treated / self.length
            if money is not None:
                total.paid[:] += (x * money).sum(axis=1) / self.length
            onward = through(x, matrices)
            total.counts[:] += np.where(self.exits, onward, 0.0) @ fold
            x = np.where(self.exits, 0.0, onward) + arriving


def _limit(matrices: Array) -> Array:
    """lim ((I + A) / 2)^t by squaring; rows are kept at their sum of 1."""
    power = (np.eye(matrices.shape[-1]) + matrices) / 2
    for _ in range(SQUARINGS):
        squared = power @ power
        squared /= squared.sum(axis=-1, keepdims=True)
        done = np.abs(squared - power).max() < 1e-15
        power = squared
        if done:
            break
    return power


def _solved(system: Array, right: Array) -> Array:
    """x of each system (D or 1, r, r) x = right (D, r); NaN where it has no solution (nobody can leave)."""
    if len(system) == 1:
        return np.linalg.solve(system[0], right.T).T
    try:
        out = np.linalg.solve(system, right[..., None])[..., 0]
    except np.linalg.LinAlgError:
        return np.full_like(right, np.nan)
    senseless = (out < -1e-6 * np.abs(out).max(axis=1, keepdims=True)).any(axis=1)
    return np.where(senseless[:, None], np.nan, out)
