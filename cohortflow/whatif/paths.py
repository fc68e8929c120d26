"""Expected customers and money of a course, for the estimate or for all draws at once.

    x_{h+1} = x_h M_h + j_{h+1}          contribution of step h: sum_i x_hi sum_j M_hij y_ij
                                         treated at step h: customers in a `from` state of a change in force

Everything is an expectation given the rates; draws scatter because rates and joiners are estimates. The same
draws serve the course with and without the changes, so that differences are paired. Draws stand last in every
array, so that one step runs along them in memory.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.projector.mix import filled
from cohortflow.projector.money import Terms
from cohortflow.whatif.change import concerned
from cohortflow.whatif.course import Course

Array = NDArray[np.float64]
Places = NDArray[np.intp]
Prices = Callable[[int], Terms | None]


@dataclass(frozen=True, eq=False)
class Paths:
    """counts (H+1, K, D), exits: lost since the opening; paid (H, D) contributions, treated (H, D) customers.

    short : largest share of drawn rows that could not take the whole of a change
    """

    counts: Array
    paid: Array
    treated: Array
    short: float = 0.0


@dataclass(frozen=True, eq=False)
class Gains:
    """What the second of two paths has more than the first: customers (H, K, D) at the end of each period,
    undiscounted pay (H, D); and the second path's treated customers (H, D).
    """

    counts: Array
    paid: Array
    treated: Array
    short: float = 0.0


def walk_paths(
    course: Course,
    start: Array,
    inflow: Array,
    prices: Prices,
    *,
    draws: Draws | None = None,
    shift: Array | None = None,
) -> Paths:
    """Paths over the H periods of `inflow` (H, K, D or 1), from the opening counts (K,).

    prices : step -> Terms (None: no money is counted)
    shift : (K, D) draws of the error of estimated amounts; it counts where the terms have an error
    """
    steps = steps_of(course, prices, draws, shift)
    periods, size, _ = inflow.shape
    wide = draws.size if draws is not None else 1
    out = Paths(np.zeros((periods + 1, size, wide)), np.zeros((periods, wide)), np.zeros((periods, wide)))
    for step_of in steps:
        x = step_of.opening(start)
        out.counts[0] += step_of.folded(x)
        for h, coming in enumerate(inflow):
            _, money, treated = step_of(h)
            out.treated[h] += x[treated].sum(axis=0)
            if money is not None:
                out.paid[h] += pay_of(x, money)
            x = step_of.onward(x, h, coming)
            out.counts[h + 1] += step_of.folded(x)
    return Paths(out.counts, out.paid, out.treated, max(step_of.short for step_of in steps))


def walk_gains(
    first: Sequence[Step], second: Sequence[Step], start: Array, inflows: tuple[Array, Array], wide: int
) -> Gains:
    """Two paths of `wide` draws walked side by side, and only their difference kept."""
    periods, size, _ = inflows[0].shape
    out = Gains(np.zeros((periods, size, wide)), np.zeros((periods, wide)), np.zeros((periods, wide)))
    for before, after in zip(first, second, strict=True):
        x, y = before.opening(start), after.opening(start)
        for h, (coming, others) in enumerate(zip(*inflows, strict=True)):
            _, money, _ = before(h)
            _, more, treated = after(h)
            if len(treated):
                out.treated[h] += y[treated].sum(axis=0)
            if money is not None and more is not None:
                out.paid[h] += pay_of(y, more) - pay_of(x, money)
            x, y = before.onward(x, h, coming), after.onward(y, h, others)
            out.counts[h] += after.folded(y) - before.folded(x)
    return Gains(out.counts, out.paid, out.treated, max(step_of.short for step_of in second))


def steps_of(course: Course, prices: Prices, draws: Draws | None, shift: Array | None = None) -> list[Step]:
    """One Step a component."""
    return [Step(course, c, prices, draws, shift) for c in range(len(course.schedule.components))]


class Step:
    """One component, step by step: matrices (m, m, D or 1), pay (m, D or 1), places of the treated.

    What stays the same from step to step is made once.
    """

    def __init__(
        self,
        course: Course,
        component: int,
        prices: Prices,
        draws: Draws | None,
        shift: Array | None = None,
    ) -> None:
        self.course, self.component, self.prices = course, component, prices
        self.draws, self.shift = draws, shift
        self.part = course.schedule.components[component]
        size = len(course.schedule.states)
        self.plain = np.array_equal(self.part.report, np.arange(size))
        self.fold = self.part.collapse(size).T
        self.short = 0.0
        self.key: tuple[int, tuple[int, ...], int] | None = None
        self.held: tuple[Array, Array | None, Places] | None = None

    def __call__(self, step: int) -> tuple[Array, Array | None, Places]:
        terms = self.prices(step)
        shocked = self.draws is not None and "common shocks" in self.draws.part
        place = step if shocked else self.part.position(self.course.first_step + step)
        key = (place, self.course.in_force(step), id(terms))
        if self.held is None or key != self.key:
            self.key, self.held = key, self._made(step, terms)
        return self.held

    def priced(self, prices: Prices) -> Step:
        """The same step with other prices; what was made is kept."""
        other = copy.copy(self)
        other.prices = prices
        return other

    def onward(self, x: Array, step: int, coming: Array) -> Array:
        """(m, D) customers after a step, with those who arrive in it, (K, D or 1)."""
        x = through(x, self(step)[0])
        return x + self.arriving(coming) if coming.any() else x

    def opening(self, start: Array) -> Array:
        """(m, D or 1) customers of the declared counts (K,) in the places where they stand now."""
        return self._placed(start[:, None], "start")

    def arriving(self, coming: Array) -> Array:
        """(m, D or 1) the same for joiners (K, D or 1)."""
        return self._placed(coming, "join")

    def folded(self, x: Array) -> Array:
        """(K, D) by declared state."""
        return x if self.plain else self.fold @ x

    def _placed(self, counts: Array, side: str) -> Array:
        if self.draws is None or len(getattr(self.draws, side)[self.component]) == 1:
            law = getattr(self.part if self.draws is None else self.draws, side)
            law = law if self.draws is None else law[self.component][0]
            return law.T @ counts
        laws = getattr(self.draws, side)[self.component]
        return np.einsum("kd,dkm->md", np.broadcast_to(counts, (len(counts), len(laws))), laws)

    def _made(self, step: int, terms: Terms | None) -> tuple[Array, Array | None, Places]:
        if self.draws is None:
            matrices = self.course.matrix(self.component, step)[None]
        else:
            matrices, share = self.course.drawn(self.draws, self.component, step)
            self.short = max(self.short, share)
        last = np.ascontiguousarray(np.moveaxis(filled(matrices), 0, -1))
        return last, expected_pay(last, self.part.report, terms, self.shift), self._treated(step)

    def _treated(self, step: int) -> Places:
        states, out = self.course.schedule.states, np.zeros(len(self.course.schedule.states))
        for change in (self.course.changes[n] for n in self.course.in_force(step)):
            if self.component in concerned(self.course.schedule, change):
                out += states.mask((change.from_,) if change.from_ in states.names else states.live)
        return np.flatnonzero(out[self.part.report])


def expected_pay(
    matrices: Array, report: NDArray[np.int64], terms: Terms | None, shift: Array | None = None
) -> Array | None:
    """(m, D or 1) sum_j M_ij y_ij; the amounts of a state are `shift` (K, D) off where they are estimates."""
    if terms is None:
        return None
    pay = np.einsum("ijd,ij->id", matrices, terms.amounts()[np.ix_(report, report)])
    if shift is None or terms.error is None:
        return pay
    off = (shift * (np.diag(terms.error) > 0)[:, None])[report]
    more = terms.weight * off + (1 - terms.weight) * np.einsum(
        "ijd,jd->id", np.broadcast_to(matrices, (*matrices.shape[:2], off.shape[1])), off
    )
    return pay + (more if terms.once is None else np.where(terms.once[report][:, None], 0.0, more))


def pay_of(x: Array, money: Array) -> Array:
    """(D or 1,) sum_i x_i pay_i."""
    if x.shape[1] != money.shape[1]:
        return (x * money).sum(axis=0)
    return np.einsum("md,md->d", x, money)


def through(x: Array, matrices: Array) -> Array:
    """(a, D or 1) through (a, b, D or 1).

    >>> through(np.array([[1.0], [2.0]]), np.array([[[0.5], [0.5]], [[0.0], [1.0]]])).ravel()
    array([0.5, 2.5])
    """
    if matrices.shape[2] == 1:
        return matrices[:, :, 0].T @ x
    if x.shape[1] == 1:
        return np.einsum("a,abd->bd", x[:, 0], matrices)
    return np.einsum("ad,abd->bd", x, matrices)
