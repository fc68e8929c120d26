"""Where a scenario is asked about: the model, the base, the joiners, the money, with the scenario and
without.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Schedule
from cohortflow.errors import CallError, listed
from cohortflow.projector import accept
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.money import Terms
from cohortflow.projector.project import as_joiners
from cohortflow.whatif.course import Course
from cohortflow.whatif.money import Money, as_money
from cohortflow.whatif.paths import Prices
from cohortflow.whatif.scenario import Scenario, Window, joiners_under

Array = NDArray[np.float64]


def for_segment(model: Any, plan: Scenario, segment: str) -> tuple[Any, str]:
    """The model that a scenario for one segment is about: the model itself, or its segment's own Fit."""
    if not plan.segments:
        return model, segment
    (name,) = plan.segments
    parts = [c.name for c in accept.as_schedule(model).components]
    if name in parts:
        return model, segment
    fits = getattr(model, "segments", None) or {}
    if name not in fits:
        raise CallError(
            f'Scenario "{plan.name}" is for the segment "{name}", and this model knows no such part '
            f"({listed([*fits, *parts])}). Fit it with by= the segment's column, or use the segment model."
        )
    return fits[name], name


@dataclass(frozen=True, eq=False)
class Side:
    """One of the two forecasts: its matrices, its money, and its long-run money."""

    course: Course
    prices: Prices
    later_prices: Prices


@dataclass(frozen=True, eq=False)
class Setting:
    """Everything about a comparison that does not depend on draws.

    window : steps in which the scenario's joiners, prices and costs are in force; its changes have their own
    """

    schedule: Schedule
    scenario: Scenario
    base: int | None
    start: Array
    joiners: Joiners
    money: Money
    window: Window
    without: Side
    under: Side

    @classmethod
    def of(
        cls,
        model: Any,
        plan: Scenario,
        *,
        periods: int,
        start: Any,
        joiners: Any,
        value: Any,
        base_period: Any,
    ) -> Setting:
        schedule = accept.as_schedule(model)
        accept.refuse_unknown(schedule, "A what-if")
        steps = accept.as_periods(periods)
        counts = accept.opening(model, start, schedule.states)
        base = accept.base_period(model, start, base_period, schedule.calendar)
        first = accept.first_step(schedule, base)
        money = _money(value, schedule, plan)
        window = Window.of(plan.starts, plan.ends, base, schedule.calendar)
        now = _constant(money.terms)
        dear = _constant(_priced(money.terms, plan, schedule))
        under = Side(
            Course.of(schedule, plan.changes, base, first),
            lambda step: dear(step) if window.holds(step) else now(step),
            dear if np.isinf(window.last) else now,
        )
        without = Side(Course.of(schedule, (), base, first), now, now)
        coming = as_joiners(joiners, schedule, base, steps)
        return cls(schedule, plan, base, counts, coming, money, window, without, under)

    @property
    def periods(self) -> int:
        """H."""
        return self.joiners.periods

    @property
    def sides(self) -> tuple[Side, Side]:
        """Without and with the scenario."""
        return self.without, self.under

    def inflows(self, size: int | None = None, rng: np.random.Generator | None = None) -> tuple[Array, Array]:
        """(H, K, D or 1) all who arrive, without and with the scenario: as expected, or `size` draws."""
        joined, back = (self._arrivals(kind, size, rng) for kind in ("joined", "returned"))
        new = joiners_under(self.scenario, joined, self.schedule.states, self.window)
        return tuple(np.moveaxis(side + back, 0, -1) for side in (joined, new))  # type: ignore[return-value]

    def long_inflows(self) -> tuple[Array, Array]:
        """(K,) those who arrive a period in the long run: the average over the last full cycle."""
        cycle = min(self.periods, self.schedule.calendar.cycle)
        joined, back = (self.joiners.expected(k)[-cycle:] for k in ("joined", "returned"))
        kept = Window() if np.isinf(self.window.last) else Window(0, 0)
        new = joiners_under(self.scenario, joined, self.schedule.states, kept)
        return (joined + back).mean(axis=0), (new + back).mean(axis=0)

    def drawn_shift(self, size: int, rng: np.random.Generator) -> Array | None:
        """(K, D) draws of the error of estimated amounts; None where amounts are given."""
        terms = self.money.terms
        if terms is None or terms.error is None:
            return None
        return rng.multivariate_normal(np.zeros(len(terms.error)), terms.error, size, method="eigh").T

    def costs(self, treated: Array) -> Array:
        """(H, D) undiscounted costs, from the customers treated (H, D)."""
        on = np.array([self.window.holds(h) for h in range(self.periods)])[:, None]
        return self.scenario.cost_per_customer * treated + self.scenario.fixed_cost * on

    def late_costs(self, treated: Array) -> Array:
        """(D,) costs a period in the long run, from the customers treated (D,)."""
        fixed = self.scenario.fixed_cost if np.isinf(self.window.last) else 0.0
        return self.scenario.cost_per_customer * treated + fixed

    @property
    def fixed_costs(self) -> Array:
        """(H,) the part of the costs that nobody's treatment causes."""
        return self.costs(np.zeros((self.periods, 1)))[:, 0]

    @property
    def discount(self) -> Array:
        """(H,) factors of the steps."""
        terms, steps = self.money.terms, np.arange(self.periods)
        return np.ones(self.periods) if terms is None else np.power(terms.factor, steps + terms.lag)

    @property
    def begins(self) -> int:
        """The step in which the scenario's first part comes into force."""
        own = [w.first for w in self.under.course.windows]
        return min([*own, *([] if own else [self.window.first])])

    def _arrivals(self, kind: str, size: int | None, rng: np.random.Generator | None) -> Array:
        expected = self.joiners.expected(kind)
        if size is None or rng is None or not expected.any():
            return expected[None]
        return self.joiners.inflows[kind].draw(size, rng)


def _money(value: Any, schedule: Schedule, plan: Scenario) -> Money:
    money = as_money(value, schedule)
    if money.terms is None and (plan.costs or plan.per_period is not None):
        raise CallError(
            f'Scenario "{plan.name}" is about money; say how money is counted: value= a Value, or a mapping '
            "with the keywords of cf.value."
        )
    return money


def _priced(terms: Terms | None, plan: Scenario, schedule: Schedule) -> Terms | None:
    """The terms with the scenario's prices."""
    if terms is None or plan.per_period is None:
        return terms
    amounts, error = np.array(terms.per_period), terms.error
    given = schedule.states.mask(plan.per_period)
    for name, amount in plan.per_period.items():
        amounts[schedule.states.index(name)] = amount
    if error is not None:
        error = np.where(given[:, None] | given[None], 0.0, error)
    return replace(terms, per_period=amounts, error=error)


def _constant(terms: Terms | None) -> Prices:
    return lambda step: terms
