r"""The matrices of a component as one chain, and the visits in it: what comes in from the left, what lies
ahead.

    left = entering (I - Q)^{-1},     right = (I - Q)^{-1} weight

A season of n matrices is one system of n blocks. One LU factor serves both solves; where exits are very rare
(probability e a period) the figures lose the digits of 1/e.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from cohortflow.chain import Component, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.markov.structure import sure
from cohortflow.projector.mix import filled

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Block:
    """One component's matrices as one chain of n places, each of m states; the last place leads on, or
    back.
    """

    part: Component
    positions: tuple[int, ...]
    inside: NDArray[np.int64]
    exits: NDArray[np.int64]

    @classmethod
    def of(cls, part: Component, schedule: Schedule, first_step: int) -> Block:
        length = len(part.matrices)
        if part.tail == "cycle":
            places = tuple((first_step + k) % length for k in range(length))
        else:
            places = tuple(range(min(max(first_step, 0), length - 1), length))
        gone = schedule.states.exit_mask[part.report]
        return cls(part, places, np.flatnonzero(~gone), np.flatnonzero(gone))

    @property
    def cycle(self) -> int:
        """Length of the season, 1 without one."""
        return len(self.positions) if self.part.tail == "cycle" else 1

    def onward(self, place: int) -> int:
        """The place after a place."""
        last = len(self.positions) - 1
        return place + 1 if place < last else 0 if self.part.tail == "cycle" else last

    def at_once(self, law: Array) -> Array:
        """(n, m) entering at the first place."""
        out = np.zeros((len(self.positions), len(law)))
        out[0] = law
        return out

    def everywhere(self, inflow: Array) -> Array:
        """(n, m) entering at every place of a season, or at the last of a sequence, for ever."""
        if self.part.tail == "cycle":
            return np.tile(inflow, (len(self.positions), 1))
        out = np.zeros((len(self.positions), len(inflow)))
        out[-1] = inflow
        return out

    def solve(self, entering: Array, weight: Array) -> tuple[Array, Array]:
        """(n, m) left and right vectors; right is NaN where exit is not certain, both 0 at the exits.

        Raises NotIdentified when somebody gets to a place from which exit is not certain.
        """
        moves, shape = self._moves(), entering.shape
        start, wanted = entering.ravel().copy(), np.tile(weight, shape[0])
        gone = np.zeros(shape, dtype=bool)
        gone[:, self.exits] = True
        out = gone.ravel()
        start[out] = wanted[out] = 0.0
        certain = self._certain(moves, out)
        if certain.all():
            left, right = _both(moves, start, wanted, out)
        else:
            left, right = self._some(moves, start, wanted, out, certain)
        left[out] = right[out] = 0.0
        return left.reshape(shape), right.reshape(shape)

    def _some(
        self, moves: Array, start: Array, weight: Array, out: Flags, certain: Flags
    ) -> tuple[Array, Array]:
        """The same over the places from which exit is certain, if nobody gets to the others."""
        left, right = np.zeros(len(start)), np.full(len(start), np.nan)
        kept = np.ix_(certain, certain)
        left[certain], right[certain] = _both(moves[kept], start[certain], weight[certain], out[certain])
        stuck = (
            start[~certain].any() or (left[certain & ~out] @ moves[np.ix_(certain & ~out, ~certain)]).any()
        )
        if stuck:
            raise NotIdentified(
                "Exit is not certain for everybody who gets into this figure, so it has no limit: some stay "
                "for ever. Declare the missing exit, or ask for a figure at a horizon."
            )
        return left, right

    def _moves(self) -> Array:
        """(n m, n m) moves among the places; the rows of exits do not count."""
        matrices = filled(self.part.matrices)
        n, m = len(self.positions), len(self.part.report)
        if n == 1:
            return matrices[self.positions[0]]
        out = np.zeros((n, m, n, m))
        for k, position in enumerate(self.positions):
            out[k, :, self.onward(k)] = matrices[position]
        return out.reshape(n * m, n * m)

    def _certain(self, moves: Array, out: Flags) -> Flags:
        """Places from which exit is certain and no row without data lies on the way (exits: true)."""
        unknown = np.isnan(self.part.matrices[list(self.positions), :, 0]).ravel()
        if not unknown.any() and (moves[:, out] > 0).any(axis=1).all():
            return np.ones(len(out), dtype=bool)
        known = np.where((out | unknown)[:, None], False, moves > 0)
        known[unknown, unknown] = True
        return sure(known, np.flatnonzero(out).tolist())


def _both(moves: Array, start: Array, weight: Array, out: Flags) -> tuple[Array, Array]:
    """start (I - Q)^{-1} and (I - Q)^{-1} weight from one factor, Q the moves with empty rows at the
    exits.
    """
    system = -moves
    system[out] = 0.0
    system[np.diag_indices_from(system)] += 1.0
    # LAPACK wants columns first: the transpose of a row-first array is that already
    factor = lu_factor(system.T, overwrite_a=True, check_finite=False)
    left = lu_solve(factor, start, check_finite=False)
    return left, lu_solve(factor, weight, trans=1, check_finite=False)
