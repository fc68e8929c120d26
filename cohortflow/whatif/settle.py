"""Where a course settles: the base that constant joiners keep up, or, if nobody joins, what becomes of those
there.

Over a cycle of n matrices M_0 .. M_{n-1} (n = 1 without seasons), with A = M_0 ... M_{n-1}:

    joiners    x_0 (I - A) = c,   c = sum_k j M_{k+1} ... M_{n-1};     x_{k+1} = x_k M_k + j
    nobody     x_0 = begin lim ((I + A) / 2)^t, which is the time average of begin A^t, periodic or not

Figures are averages over the cycle, per period. A base without a way out grows for ever: NaN with that
reason.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.markov.structure import leads_to, reachability
from cohortflow.whatif.paths import Step, pay_of, through

Array = NDArray[np.float64]

SQUARINGS = 60


@dataclass(frozen=True, eq=False)
class Settled:
    """counts (K, D): customers by state, at exits those lost a period; paid, treated (D,) a period; reason:
    code.
    """

    counts: Array
    paid: Array
    treated: Array
    reason: str = ""


def settle(steps: Sequence[Step], start: Array, inflow: Array, wide: int = 1) -> Settled:
    """Where it settles when `inflow` (K,) join in every period, from the opening counts (K,); `wide`
    draws.
    """
    size = len(start)
    total = Settled(np.zeros((size, wide)), np.zeros(wide), np.zeros(wide))
    for step_of in steps:
        ring = _Ring(step_of, inflow)
        reason = ring.endless()
        if reason:
            nothing = np.full(wide, np.nan)
            return Settled(np.full((size, wide), np.nan), nothing, nothing, reason)
        ring.add(total, ring.first(start))
    return total


class _Ring:
    """The matrices of one component that come round for ever; arrays end with the draws (D or 1)."""

    def __init__(self, step_of: Step, inflow: Array) -> None:
        self.step_of, self.part, self.joins = step_of, step_of.part, bool(inflow.any())
        season = self.part.tail == "cycle"
        self.begins = max(step_of.course.settled_after, 0 if season else len(self.part.matrices))
        self.length = len(self.part.matrices) if season else 1
        self.exits = step_of.course.schedule.states.exit_mask[self.part.report]
        self.turns = [step_of(self.begins + k) for k in range(self.length)]
        self.coming = step_of.arriving(inflow[:, None])

    def endless(self) -> str:
        """Why joiners have no settled base: some of them can never leave; or nothing is known about a row."""
        arriving = self.coming.max(axis=1) > 0
        moves = np.stack([(m > 0).any(axis=2) for m, _, _ in self.turns]).any(axis=0)
        reached = reachability(np.asarray(moves))[arriving].any(axis=0)
        if np.isnan(self.part.matrices).any(axis=(0, 2))[reached].any():
            return "rows_without_data"
        leaving = leads_to(np.asarray(moves), np.flatnonzero(self.exits).tolist())
        return "" if leaving[reached].all() else "grows_without_limit"

    def first(self, start: Array) -> Array:
        """(m, D) customers at the first place of the cycle; nobody in the exits."""
        if not self.joins and self._all_leave():
            return np.zeros((len(self.exits), 1))
        product = self._product()
        if not self.joins:
            there = through(self._walked(start), np.moveaxis(_limit(product), 0, -1))
            return np.where(self.exits[:, None], 0.0, there)
        inside = np.flatnonzero(~self.exits)
        after = [np.moveaxis(self._product(k + 1), 0, -1) for k in range(self.length)]
        entering = np.sum([through(self.coming, m) for m in after], axis=0)[inside].T
        system = np.eye(len(inside)) - product[:, inside[:, None], inside]
        wide = max(len(system), len(entering))
        out = np.zeros((len(self.exits), wide))
        right = np.broadcast_to(entering, (wide, len(inside)))
        out[inside] = _solved(np.swapaxes(system, 1, 2), right).T
        return out

    def add(self, total: Settled, x: Array) -> None:
        """Add the averages over the cycle to the totals."""
        gone = self.exits[:, None]
        for matrices, money, treated in self.turns:
            onward = through(x, matrices)
            total.counts[:] += self.step_of.folded(np.where(gone, onward, x)) / self.length
            total.treated[:] += x[treated].sum(axis=0) / self.length
            if money is not None:
                total.paid[:] += pay_of(x, money) / self.length
            x = np.where(gone, 0.0, onward) + self.coming

    def _product(self, first: int = 0) -> Array:
        """(D or 1, m, m) M_first ... M_{n-1}."""
        out = np.eye(len(self.exits))[None]
        for matrices, _, _ in self.turns[first:]:
            out = out @ np.moveaxis(matrices, -1, 0)
        return out

    def _all_leave(self) -> bool:
        """Whether nobody stays for ever, in every draw."""
        every = np.stack([(m > 0).all(axis=2) for m, _, _ in self.turns]).all(axis=0)
        return bool(np.all(leads_to(np.asarray(every), np.flatnonzero(self.exits).tolist())))

    def _walked(self, start: Array) -> Array:
        """Where those who are there now stand when the cycle begins."""
        x = self.step_of.opening(start)
        for h in range(self.begins):
            x = through(x, self.step_of(h)[0])
        return x


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
