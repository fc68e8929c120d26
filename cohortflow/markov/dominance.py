r"""Which classes of a chain that loses mass decide who is left in the end, and with what vectors.

Among the communicating classes of Q, those whose own largest eigenvalue equals the largest of all are
`tied` (often there is one). A line of tied classes, each leading to the next, of length l keeps about
n^(l-1) lambda^n of its starters, so the longest lines decide and their last classes, the ends, hold the
mass.

Source: Rothblum (1975), Linear Algebra Appl. 12; Seneta (1981), Non-negative Matrices and Markov Chains,
ch. 1; Noda (1971), Numerische Mathematik 17 (the iteration).
"""

from __future__ import annotations

import math

import numpy as np

from cohortflow.markov.arguments import Array, grid
from cohortflow.markov.structure import communicating_classes, leads_to, period, reachability

_TIE = 1e-12
_ROUNDS = 60


class Dominance:
    """Tied classes of Q (m, m), their lines and ends; a class is named by its place in `classes`.

    top      largest eigenvalue of Q; 0 when no state can be come back to
    tied     classes that have it, those at the end of a line first
    cyclic   some line keeps a rhythm: all its classes share a period above 1

    >>> found = Dominance(np.array([[0.8, 0.1, 0.0], [0.0, 0.8, 0.1], [0.0, 0.0, 0.5]]))
    >>> found.tied, [sorted(found.ends(state)) for state in range(3)]
    ([1, 0], [[1], [1], []])
    """

    def __init__(self, matrix: Array) -> None:
        self.matrix = matrix
        self.classes = communicating_classes(matrix)
        self._reach = reachability(matrix)
        self._pairs = [dominant_pair(matrix[grid(group, group)]) for group in self.classes]
        self.top = max(value for value, _, _ in self._pairs)
        tied = [
            c for c, (value, _, _) in enumerate(self._pairs) if value > 0 and value >= self.top * (1 - _TIE)
        ]
        after = {c: [d for d in tied if d != c and self._leads(c, d)] for c in tied}
        self.tied = sorted(tied, key=lambda c: len(after[c]))
        self._depth: dict[int, int] = {}
        self._below: dict[int, list[int]] = {}
        self._ends: dict[int, set[int]] = {}
        rhythms: dict[int, set[int]] = {}
        for c in self.tied:
            self._depth[c] = 1 + max((self._depth[d] for d in after[c]), default=0)
            below = [d for d in after[c] if self._depth[d] == self._depth[c] - 1]
            own = period(matrix, self.classes[c])
            self._below[c] = below
            self._ends[c] = set().union(*(self._ends[d] for d in below)) or {c}
            rhythms[c] = {math.gcd(own, r) for d in below for r in rhythms[d]} or {own}
        self.cyclic = any(r > 1 for found in rhythms.values() for r in found)

    def ends(self, state: int) -> set[int]:
        """Last classes of the longest lines that a state leads to; none if it leads to no tied class."""
        entered = [c for c in self.tied if self._reach[state, self.classes[c][0]]]
        longest = max((self._depth[c] for c in entered), default=0)
        return set().union(*(self._ends[c] for c in entered if self._depth[c] == longest))

    def left(self, end: int) -> Array:
        """u with u Q = lambda u, shape (m,), sum 1: an end class and the states it leads to."""
        group = list(self.classes[end])
        after = [s for s in np.flatnonzero(self._reach[group[0]]).tolist() if s not in group]
        law = np.zeros(len(self.matrix))
        law[group] = self._pairs[end][1]
        if after:
            law[after] = np.linalg.solve(self._lagged(after).T, law[group] @ self.matrix[grid(group, after)])
        return law / law.sum()

    def right(self, end: int) -> Array:
        """w with Q w = lambda w, shape (m,), u w = 1: an end class and the states that lead to it.

        Infinite where a tied class stands between: there the share left falls more slowly than lambda^n.
        """
        group = list(self.classes[end])
        weight = np.zeros(len(self.matrix))
        weight[group] = self._pairs[end][2] / (self.left(end)[group] @ self._pairs[end][2])
        between = [s for c in self.tied if c != end and self._leads(c, end) for s in self.classes[c]]
        slower = leads_to(self.matrix, between)
        weight[slower] = math.inf
        before = [
            s for s in np.flatnonzero(leads_to(self.matrix, group) & ~slower).tolist() if s not in group
        ]
        if before:
            pull = self.matrix[grid(before, group)] @ weight[group]
            weight[before] = np.linalg.solve(self._lagged(before), pull)
        return weight

    def shares(self, start: Array) -> dict[int, float]:
        """Share of each end among those remaining from one start law: the leading term of start Q^n.

        The states outside the tied classes are passed through by (lambda I - Q_rest)^{-1}; a line then weighs
        start w_1 (u_1 C w_2) (u_2 C w_3) ..., C the crossings between tied classes.
        """
        rest = [s for s in range(len(start)) if not any(s in self.classes[c] for c in self.tied)]
        passing = np.linalg.solve(self._lagged(rest), self.matrix[rest])
        arriving = start + start[rest] @ passing
        crossings = self.matrix + self.matrix[:, rest] @ passing
        onward: dict[int, dict[int, float]] = {}
        for c in self.tied:
            onward[c] = {} if self._below[c] else {c: 1.0}
            for d in self._below[c]:
                crossing = float(
                    self._law(c) @ crossings[grid(self.classes[c], self.classes[d])] @ self._worth(d)
                )
                for end, weight in onward[d].items():
                    onward[c][end] = onward[c].get(end, 0.0) + crossing * weight
        longest = max(self._depth.values())
        found: dict[int, float] = {}
        for c in (c for c in self.tied if self._depth[c] == longest):
            first = float(arriving[list(self.classes[c])] @ self._worth(c))
            for end, weight in onward[c].items():
                # the law of an end class counts the states it leads to as well
                inside = float(self.left(end)[list(self.classes[end])].sum())
                found[end] = found.get(end, 0.0) + first * weight / inside
        return {end: weight / sum(found.values()) for end, weight in found.items()}

    def _leads(self, c: int, d: int) -> bool:
        return bool(self._reach[self.classes[c][0], self.classes[d][0]])

    def _law(self, c: int) -> Array:
        return self._pairs[c][1]

    def _worth(self, c: int) -> Array:
        _, left, right = self._pairs[c]
        return right / (left @ right)

    def _lagged(self, states: list[int]) -> Array:
        return self.top * np.eye(len(states)) - self.matrix[grid(states, states)]


def dominant_pair(block: Array) -> tuple[float, Array, Array]:
    """Largest eigenvalue of one class with its left and right vectors, each positive with sum 1.

    >>> dominant_pair(np.array([[0.5, 0.2], [0.2, 0.5]]))
    (0.7, array([0.5, 0.5]), array([0.5, 0.5]))
    """
    if len(block) == 1:
        return float(block[0, 0]), np.ones(1), np.ones(1)
    right = _positive_vector(block)
    left = _positive_vector(block.T)
    return float(left @ block.sum(axis=1)), left, right


def _positive_vector(block: Array) -> Array:
    """Inverse iteration with max (B x)_i / x_i as shift: positive throughout, quadratic in the end."""
    vector = np.full(len(block), 1.0 / len(block))
    for _ in range(_ROUNDS):
        quotients = (block @ vector) / vector
        bound = float(quotients.max())
        if bound - float(quotients.min()) <= np.finfo(float).eps * bound * len(block):
            break
        shifted = bound * (1 + np.finfo(float).eps) * np.eye(len(block)) - block
        stepped = np.abs(np.linalg.solve(shifted, vector))
        if not np.isfinite(stepped).all() or stepped.min() == 0:
            break
        vector = stepped / stepped.sum()
    return vector
