"""`what_if`: a scenario on any model, paired with the forecast as it stands."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.projector import accept
from cohortflow.projector.mix import walk
from cohortflow.whatif.compare import Pair, WhatIf, payback
from cohortflow.whatif.paths import Gains, Paths, steps_of, walk_paths
from cohortflow.whatif.scattered import MONEY, Scattered, settle_both
from cohortflow.whatif.scenario import as_scenario
from cohortflow.whatif.setting import Setting, for_segment

Array = NDArray[np.float64]
Both = tuple[Paths, Paths]

DRAWS = 2000


def what_if(
    model: Any,
    scenario: Any,
    *,
    periods: int,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    level: float = 0.90,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    covariance: str | None = None,
    base_period: str | int | None = None,
    segment: str = "all",
) -> WhatIf:
    """Compare a scenario with the forecast as it stands: by period, over all periods, in the long run.

    Parameters
    ----------
    model : a Fit, Chain or Schedule
    scenario : a Scenario, a Change, or Changes in the order in which they apply
    periods, start, joiners, totals, base_period : as for `project`
    value : how money is counted: a Value (from `cf.value`), or a mapping with the keywords of `cf.value`
        (per_period, on_move, discount_rate, timing, first_period_discounted); None: customers only
    level, draws, rng, covariance : of the intervals; a bare Chain has none unless Draws are given

    A change for a segment acts on the model's part of that name, or, for a Fit made `by` segments, on that
    segment's own Fit, and then the result is about its customers alone. CallError, with the largest feasible
    size, where the rates cannot take a change.

    >>> from cohortflow import Chain, Change, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> better = what_if(chain, Change("steady", "left", add=-0.05), periods=2, start={"steady": 100})
    >>> better.by_period["steady"].difference  # 95 - 90, 90.25 - 81
    array([5.  , 9.25])
    """
    plan = as_scenario(scenario)
    model, segment = for_segment(model, plan, segment)
    at = Setting.of(
        model, plan, periods=periods, start=start, joiners=joiners, value=value, base_period=base_period
    )
    drawn = accept.draws_of(model, draws, generator := accept.as_rng(rng), covariance)
    weights = _weights(at, totals)
    scattered = None if drawn is None else Scattered.of(at, weights, drawn, generator)
    asked = _Asked(at, weights, accept.as_level(level), scattered)
    by_period, total = asked.ahead()
    settled, why = asked.settled()
    return WhatIf(
        plan, at.schedule, at.base, by_period, total, settled, level, "none" if drawn is None else "draws",
        0 if drawn is None else drawn.size, at.money.currency, _reasons(at, why, scattered), segment,
    )  # fmt: skip


def _weights(at: Setting, totals: Mapping[str, Sequence[str]] | None) -> dict[str, Array]:
    """Quantity -> (K,): states, all_live, the totals, the exits."""
    states = at.schedule.states
    return accept.weights_of(states, totals) | {n: np.eye(len(states))[states.index(n)] for n in states.exits}


def _reasons(at: Setting, why: str, scattered: Scattered | None) -> tuple[str, ...]:
    reasons = [f"rows_without_data:{s}" for s in at.schedule.unknown]
    reasons += [f"settled:{why}"] if why else []
    if scattered and scattered.gains.short:
        reasons.append(f"change_cut_short_in_draws:{scattered.gains.short:.3g}")
    return tuple(reasons)


@dataclass(frozen=True, eq=False)
class _Asked:
    """The figures of one comparison.

    A table of figures (P, Q) has a column for each quantity of `weights` and, with money, for value, cost and
    net.
    """

    at: Setting
    weights: Mapping[str, Array]
    level: float
    scattered: Scattered | None

    def ahead(self) -> tuple[dict[str, Pair], dict[str, Pair]]:
        """By period, and over all periods."""
        estimate = self._estimate()
        base, changed = self._tables(estimate)
        gone = self._undefined()
        base, changed = np.where(gone[0], np.nan, base), np.where(gone[1], np.nan, changed)
        by_period = {
            n: self._pair(base[:, q], changed[:, q], self._drawn("by_period", n))
            for q, n in enumerate(self.names)
        }
        if self.at.money.terms is None:
            return by_period, {}
        total = {
            n: self._pair(by_period[n].base.sum(), by_period[n].changed.sum(), self._drawn("total", n))
            for n in MONEY
        }
        if not np.isnan(total["net"].difference):
            total |= self._judged(_gain(estimate))
        return by_period, total

    def settled(self) -> tuple[dict[str, Pair], str]:
        """A period in the long run, and why there is none."""
        steps = [steps_of(side.course, side.prices, None) for side in self.at.sides]
        first, second = settle_both(self.at, (steps[0], steps[1]), 1)
        reason = first.reason or second.reason
        base = self._table(first.counts.T, first.paid, np.zeros(1))[0]
        changed = self._table(second.counts.T, second.paid, self.at.late_costs(second.treated))[0]
        return {
            n: self._pair(base[q], changed[q], None if reason else self._drawn("settled", n))
            for q, n in enumerate(self.names)
        }, reason

    # ---- inner ----
    @property
    def names(self) -> tuple[str, ...]:
        """The columns of a table."""
        return (*self.weights, *(MONEY if self.at.money.terms is not None else ()))

    @property
    def _columns(self) -> Array:
        """(Q, K) weights of the quantities."""
        return np.array(list(self.weights.values()))

    def _table(self, counts: Array, paid: Array, cost: Array) -> Array:
        """(P, Q) from (P, K) customers, (P,) discounted pay and costs."""
        customers = counts @ self._columns.T
        if self.at.money.terms is None:
            return customers
        return np.column_stack([customers, paid, cost, paid - cost])

    def _estimate(self) -> Both:
        first, second = (
            walk_paths(side.course, self.at.start, inflow, side.prices)
            for side, inflow in zip(self.at.sides, self.at.inflows(), strict=True)
        )
        return first, second

    def _tables(self, paths: Both) -> tuple[Array, Array]:
        """(P, Q) of the estimate, without and with."""
        first, second = ((p.counts[1:, :, 0], self.at.discount * p.paid[:, 0]) for p in paths)
        cost = self.at.discount * self.at.costs(paths[1].treated)[:, 0]
        return self._table(*first, np.zeros_like(cost)), self._table(*second, cost)

    def _pair(self, base: Any, changed: Any, drawn: Callable[[], Array] | None) -> Pair:
        return Pair(base, changed, drawn, self.level)

    def _drawn(self, kind: str, name: str) -> Callable[[], Array] | None:
        """The draws of a figure, made when they are asked for."""
        return None if self.scattered is None else partial(getattr(self.scattered, kind), name)

    def _undefined(self) -> NDArray[np.bool_]:
        """(2, P, Q) what depends on a state that can be reached from one without data."""
        at, weights = self.at, self._columns.T != 0
        if at.money.terms is not None:
            weights = np.column_stack([weights, np.ones((len(weights), 3), dtype=bool)])
        out = np.zeros((2, at.periods, weights.shape[1]), dtype=bool)
        if at.schedule.unknown:
            for n, (side, inflow) in enumerate(zip(at.sides, at.inflows(), strict=True)):
                gone = walk(side.course.explicit(at.periods), at.start, at.periods, inflow[..., 0]).undefined
                out[n] = gone[1:] @ weights
        return out

    def _judged(self, estimate: Gains) -> dict[str, Pair]:
        """The cost that breaks even, and when it has paid: the scenario's own figures, base 0."""
        out = {}
        for name, wanted, measure in (
            ("break_even_cost", bool(self.at.under.course.changes), self._break_even),
            ("payback_periods", self.at.scenario.costs, self._payback),
        ):
            if wanted:
                drawn = None if self.scattered is None else partial(measure, self.scattered.gains)
                out[name] = Pair(0.0, float(measure(estimate)[0]), drawn, self.level)
        return out

    def _break_even(self, gains: Gains) -> Array:
        treated = self.at.discount @ gains.treated
        gain = self.at.discount @ (gains.paid - self.at.fixed_costs[:, None])
        return np.divide(gain, treated, out=np.full_like(gain, np.nan), where=treated > 0)

    def _payback(self, gains: Gains) -> Array:
        net = self.at.discount[:, None] * (gains.paid - self.at.costs(gains.treated))
        return payback(net, min(self.at.begins, self.at.periods - 1))


def _gain(paths: Both) -> Gains:
    """The difference of two paths."""
    first, second = paths
    return Gains(second.counts[1:] - first.counts[1:], second.paid - first.paid, second.treated)
