r"""The way of a base through given matrices: expected customers and money, and how both respond to a change.

    x_{h+1} = x_h M_h + j_{h+1} J + a_{h+1} S        contribution of period h+1: sum_r x_hr sum_c M_hrc y_rc

x over a model's expanded states, j joiners and returners, a adjustments by declared state, J and S the laws of
joiners and of those there now over the expanded states. Everything but the matrices enters linearly. Along
M(u) = (1-u) M_0 + u M_1 the effect of one move is the integral over u of its directional derivative
(Aumann & Shapley 1974, Values of Non-Atomic Games); the integrand is a polynomial in u, so that Gauss-Legendre
points give it exactly. A change of the move i to j is paid for by staying in i: measured otherwise it would
not be the move's own. Parts of all moves add up to the whole because rows keep their sum.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Schedule
from cohortflow.projector.accept import first_step
from cohortflow.projector.mix import filled

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Course:
    """One model from a base period on.

    matrices : one (n, m, m) array a component;  report : (m,) declared state of each expanded one
    join, start : (K, m) a component
    """

    size: int
    matrices: tuple[Array, ...]
    report: tuple[NDArray[np.int64], ...]
    join: tuple[Array, ...]
    start: tuple[Array, ...]

    @classmethod
    def of(cls, schedule: Schedule, base: int, periods: int, *, start_of: Schedule | None = None) -> Course:
        """The matrices that lead out of `base` and the periods after it; `start_of`: whose laws of who is
        where."""
        first = first_step(schedule, base)
        laws = start_of or schedule
        parts = schedule.components
        return cls(
            len(schedule.states),
            tuple(np.stack([filled(c.matrix(first + h)) for h in range(periods)]) if periods else
                  np.zeros((0, *c.matrices.shape[1:])) for c in parts),
            tuple(c.report for c in parts),
            tuple(c.join for c in laws.components),
            tuple(c.start for c in laws.components),
        )  # fmt: skip

    def like(self, other: Course) -> bool:
        """Whether both have the same expanded states, so that one's customers can go on in the other."""
        return len(self.report) == len(other.report) and all(
            np.array_equal(a, b) for a, b in zip(self.report, other.report, strict=True)
        )

    def expand(self, counts: Array, *, joining: bool = False) -> list[Array]:
        """(..., K) by declared state to one (..., m) a component."""
        return [counts @ law for law in (self.join if joining else self.start)]

    def collapse(self, parts: list[Array]) -> Array:
        """(..., m) a component to (..., K)."""
        return np.asarray(sum(x @ np.eye(self.size)[r] for x, r in zip(parts, self.report, strict=True)))


@dataclass(frozen=True, eq=False)
class Way:
    """counts (..., n+1, K), exits: lost on the way; paid (..., n) money of each period; end: where all stand."""

    counts: Array
    paid: Array
    end: list[Array]


def way(course: Course, opening: list[Array], joiners: Array, added: Array, money: Array) -> Way:
    """Follow (..., m) openings through n periods with (..., n, K) joiners and adjustments; money is (K, K) y."""
    n = joiners.shape[-2]
    lead = np.broadcast_shapes(opening[0].shape[:-1], joiners.shape[:-2], added.shape[:-2])
    counts, paid = np.zeros((*lead, n + 1, course.size)), np.zeros((*lead, n))
    end = []
    coming, laid = course.expand(joiners, joining=True), course.expand(added)
    for c, report in enumerate(course.report):
        fold, y = np.eye(course.size)[report], money[np.ix_(report, report)]
        x = np.broadcast_to(opening[c], (*lead, len(report)))
        counts[..., 0, :] += x @ fold
        for h in range(n):
            matrix = course.matrices[c][h]
            paid[..., h] += x @ (matrix * y).sum(axis=1)
            x = x @ matrix + coming[c][..., h, :] + laid[c][..., h, :]
            counts[..., h + 1, :] += x @ fold
        end.append(x)
    return Way(counts, paid, end)


def move_effects(
    old: Course, new: Course, opening: list[Array], joiners: Array, added: Array, money: Array
) -> tuple[Array, Array]:
    """What each move's change from `old` to `new` does: (K, K, n+1, K) customers and (K, K, n) money.

    [i, j] is the move from i to j. Both courses have the same expanded states. The laws of joiners change
    along with the matrices; what they do by themselves is not in it.

    >>> from cohortflow import Chain, States
    >>> states = States(["here", "gone"], exits=["gone"])
    >>> a, b = (Course.of(Chain(states, [[1 - p, p], [0, 1]]).schedule, 0, 1) for p in (0.1, 0.3))
    >>> none = np.zeros((1, 2))
    >>> customers, _ = move_effects(a, b, [np.array([100.0, 0])], none, none, np.zeros((2, 2)))
    >>> customers[0, 1, 1].round(9).tolist()  # 0.2 more of 100 leave
    [-20.0, 20.0]
    """
    n, size = joiners.shape[-2], old.size
    customers, paid = np.zeros((size, size, n + 1, size)), np.zeros((size, size, n))
    points, weights = np.polynomial.legendre.leggauss(n // 2 + 2)
    for u, weight in zip((points + 1) / 2, weights / 2, strict=True):
        for c in range(len(old.report)):
            _add_tangent(
                old, new, c, float(u), float(weight), (opening[c], joiners, added, money), customers, paid
            )
    return customers, paid


def _add_tangent(
    old: Course,
    new: Course,
    c: int,
    u: float,
    weight: float,
    given: tuple[Array, Array, Array, Array],
    customers: Array,
    paid: Array,
) -> None:
    """Add weight x the derivative at u of one component, by move."""
    x, joiners, added, money = given
    report, size = old.report[c], old.size
    fold, y = np.eye(size)[report], money[np.ix_(report, report)]
    inflow = joiners @ _between(old.join[c], new.join[c], u) + added @ _between(old.start[c], new.start[c], u)
    moved = np.zeros((size, size, len(report)))
    for h in range(len(joiners)):
        before, after = old.matrices[c][h], new.matrices[c][h]
        matrix = _between(before, after, u)
        push = _pushes(x, after - before, _own_law(before + after, report), fold)
        paid[:, :, h] += weight * (
            moved @ (matrix * y).sum(axis=1) + np.einsum("ijc,ic->ij", push, money[:, report])
        )
        moved = moved @ matrix + push
        customers[:, :, h + 1] += weight * (moved @ fold)
        x = x @ matrix + inflow[h]


def _between(a: Array, b: Array, u: float) -> Array:
    return (1 - u) * a + u * b


def _pushes(x: Array, change: Array, own: Array, fold: Array) -> Array:
    """(K, K, m) customers that the change of the move i to j puts into each expanded state, staying paying."""
    flow = x[:, None] * change
    to = (fold.T @ flow)[:, None, :] * fold.T[None]
    return np.asarray(to - np.einsum("ri,rj,rc->ijc", fold, flow @ fold, own, optimize=True))


def _own_law(matrix: Array, report: NDArray[np.int64]) -> Array:
    """(m, m) where a customer who stays in the declared state goes: the row's own law, evenly where it has
    none."""
    inside = report[:, None] == report[None]
    held = np.where(inside, matrix, 0.0)
    held = np.where(held.sum(axis=1, keepdims=True) > 0, held, inside.astype(float))
    return np.asarray(held / held.sum(axis=1, keepdims=True))


def quantities_of(counts: Array, weights: Mapping[str, Array]) -> Array:
    """(..., K) to (..., Q)."""
    return counts @ np.column_stack(list(weights.values()))
