"""Expected customers and money of a course, for the estimate or for all draws at once.

    x_{h+1} = x_h M_h + j_{h+1}          contribution of step h: sum_i x_hi sum_j M_hij y_ij
                                         treated at step h: customers in a `from` state of a change in force

Everything is an expectation given the rates; draws scatter because rates and joiners are estimates. The same
draws serve the course with and without the changes, so that differences are paired.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.projector.mix import filled
from cohortflow.projector.money import Terms
from cohortflow.whatif.change import concerned
from cohortflow.whatif.course import Course

Array = NDArray[np.float64]
Prices = Callable[[int], Terms | None]


@dataclass(frozen=True, eq=False)
class Paths:
    """counts (D, H+1, K), exits: lost since the opening; paid (D, H) contributions and treated (D, H)
    customers.

    short : largest share of drawn rows that could not take the whole of a change
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
    """Paths over the H periods of `inflow` (D or 1, H, K), from the opening counts (K,).

    prices : step -> Terms (None: no money is counted)
    shift : (D, K) draws of the error of estimated amounts; it counts where the terms have an error
    """
    schedule = course.schedule
    size, periods = len(schedule.states), inflow.shape[-2]
    wide = draws.size if draws is not None else 1
    out = Paths(
        np.zeros((wide, periods + 1, size)), np.zeros((wide, periods)), np.zeros((wide, periods)), 0.0
    )
    short = 0.0
    for c in range(len(schedule.components)):
        short = max(short, _component(course, c, start, inflow, Step(course, c, prices, draws, shift), out))
    return Paths(out.counts, out.paid, out.treated, short)


def _component(course: Course, c: int, start: Array, inflow: Array, step_of: Step, out: Paths) -> float:
    """Add one component's customers and money to `out`."""
    part = course.schedule.components[c]
    fold = part.collapse(len(course.schedule.states))
    draws = step_of.draws
    begin, join = (part.start[None], part.join[None]) if draws is None else (draws.start[c], draws.join[c])
    x = np.broadcast_to(through(start[None], begin), (len(out.counts), len(part.report)))
    arriving = _arriving(inflow, join)
    out.counts[:, 0] += x @ fold
    for h in range(inflow.shape[-2]):
        matrices, money, treated = step_of(h)
        out.treated[:, h] += x @ treated
        if money is not None:
            out.paid[:, h] += np.einsum("dm,dm->d", x, np.broadcast_to(money, x.shape))
        x = through(x, matrices) + arriving[h]
        out.counts[:, h + 1] += x @ fold
    return step_of.short


class Step:
    """Matrices, money and treated states of each step; what stays the same from step to step is made once."""

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
        self.short = 0.0
        self.key: tuple[int, tuple[int, ...], int] | None = None
        self.held: tuple[Array, Array | None, Array] | None = None

    def __call__(self, step: int) -> tuple[Array, Array | None, Array]:
        terms = self.prices(step)
        shocked = self.draws is not None and "common shocks" in self.draws.part
        place = step if shocked else self.part.position(self.course.first_step + step)
        key = (place, self.course.in_force(step), id(terms))
        if self.held is None or key != self.key:
            self.key, self.held = key, self._made(step, terms)
        return self.held

    def _made(self, step: int, terms: Terms | None) -> tuple[Array, Array | None, Array]:
        if self.draws is None:
            matrices = self.course.matrix(self.component, step)[None]
        else:
            matrices, share = self.course.drawn(self.draws, self.component, step)
            self.short = max(self.short, share)
        matrices = filled(matrices)
        return matrices, expected_pay(matrices, self.part.report, terms, self.shift), self._treated(step)

    def _treated(self, step: int) -> Array:
        states, out = self.course.schedule.states, np.zeros(len(self.course.schedule.states))
        for change in (self.course.changes[n] for n in self.course.in_force(step)):
            if self.component in concerned(self.course.schedule, change):
                out += states.mask((change.from_,) if change.from_ in states.names else states.live)
        return (out > 0).astype(float)[self.part.report]


def expected_pay(
    matrices: Array, report: NDArray[np.int64], terms: Terms | None, shift: Array | None = None
) -> Array | None:
    """(D or 1, m) sum_j M_ij y_ij, the amounts of a state being `shift` (D, K) off where they are
    estimates.
    """
    if terms is None:
        return None
    pay = np.einsum("dij,ij->di", matrices, terms.amounts()[np.ix_(report, report)])
    if shift is None or terms.error is None:
        return pay
    off = (shift * (np.diag(terms.error) > 0))[:, report]
    more = terms.weight * off + (1 - terms.weight) * np.einsum(
        "dij,dj->di", np.broadcast_to(matrices, (len(off), *matrices.shape[1:])), off
    )
    return pay + (more if terms.once is None else np.where(terms.once[report], 0.0, more))


def through(x: Array, matrices: Array) -> Array:
    """(D or 1, a) through (D or 1, a, b)."""
    if len(matrices) == 1:
        return x @ matrices[0]
    if len(x) == 1:
        return np.einsum("a,dab->db", x[0], matrices)
    return np.einsum("da,dab->db", x, matrices)


def _arriving(inflow: Array, join: Array) -> list[Array]:
    """One (D or 1, m) array a step: those who arrive, in the places where they start."""
    if len(join) == 1:
        return [inflow[:, h] @ join[0] for h in range(inflow.shape[1])]
    wide = np.broadcast_to(inflow, (len(join), *inflow.shape[1:]))
    return [np.einsum("dk,dkm->dm", wide[:, h], join) for h in range(inflow.shape[1])]
