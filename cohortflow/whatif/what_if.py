"""`what_if`: a scenario on any model, paired with the forecast as it stands."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.projector import accept
from cohortflow.projector.mix import walk
from cohortflow.whatif.compare import Pair, WhatIf, alone, paired, payback
from cohortflow.whatif.paths import Paths, walk_paths
from cohortflow.whatif.scenario import as_scenario
from cohortflow.whatif.setting import Setting, for_segment
from cohortflow.whatif.settle import Settled, settle

Array = NDArray[np.float64]
Two = tuple[Array, Array]
Both = tuple[Paths, Paths]
Figures = dict[str, Two]
Flags = Any  # bool arrays; numpy's stubs take any() for a number

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
    weights = _weights(at, totals)
    generator = accept.as_rng(rng)
    drawn = accept.draws_of(model, draws, generator, covariance)
    asked = _Asked(at, weights, accept.as_level(level), drawn)
    estimate = asked.paths(at.inflows(), None)
    shift = None if drawn is None else at.drawn_shift(drawn.size, generator)
    scattered = None if drawn is None else asked.paths(at.inflows(drawn.size, generator), drawn, shift)
    by_period = asked.by_period(estimate, scattered)
    settled, why = asked.settled(shift)
    return WhatIf(
        plan, at.schedule, at.base, by_period, asked.total(by_period, estimate, scattered), settled, level,
        "none" if drawn is None else "draws", 0 if drawn is None else drawn.size, at.money.currency,
        _reasons(at, why, scattered), segment,
    )  # fmt: skip


def _weights(at: Setting, totals: Mapping[str, Sequence[str]] | None) -> dict[str, Array]:
    """Quantity -> (K,): states, all_live, the totals, the exits."""
    states = at.schedule.states
    return accept.weights_of(states, totals) | {n: np.eye(len(states))[states.index(n)] for n in states.exits}


def _reasons(at: Setting, why: str, scattered: Both | None) -> tuple[str, ...]:
    reasons = [f"rows_without_data:{s}" for s in at.schedule.unknown]
    reasons += [f"settled:{why}"] if why else []
    if scattered and scattered[1].short:
        reasons.append(f"change_cut_short_in_draws:{scattered[1].short:.3g}")
    return tuple(reasons)


@dataclass(frozen=True, eq=False)
class _Asked:
    """The figures of one comparison; every pair stands without and with the scenario."""

    at: Setting
    weights: Mapping[str, Array]
    level: float
    draws: Draws | None

    def paths(self, inflows: Two, draws: Draws | None, shift: Array | None = None) -> Both:
        start = self.at.start
        first, second = (
            walk_paths(side.course, start, inflow, side.prices, draws=draws, shift=shift)
            for side, inflow in zip(self.at.sides, inflows, strict=True)
        )
        return first, second

    def by_period(self, estimate: Both, scattered: Both | None) -> dict[str, Pair]:
        """Customers of every quantity; discounted value, cost and net."""
        unknown = self._undefined()
        lost: dict[str, Flags] = {n: unknown[:, 1:, w != 0].any(axis=2) for n, w in self.weights.items()}
        out = self._pairs(self._counts(estimate), scattered and self._counts(scattered), lost)
        if self.at.money.terms is None:
            return out
        figures = self._money(estimate)
        any_lost: dict[str, Flags] = dict.fromkeys(figures, unknown[:, 1:].any(axis=2))
        return out | self._pairs(figures, scattered and self._money(scattered), any_lost)

    def total(self, by_period: Mapping[str, Pair], estimate: Both, scattered: Both | None) -> dict[str, Pair]:
        """Over all periods: value, cost, net; the cost that breaks even; when it has paid."""
        if self.at.money.terms is None:
            return {}
        lost: Flags = np.isnan([by_period["net"].base, by_period["net"].changed]).any(axis=1)
        figures = _summed(self._money(estimate))
        many = None if scattered is None else _summed(self._money(scattered))
        pairs = self._pairs(figures, many, dict.fromkeys(figures, lost))
        out = {name: pair.only() for name, pair in pairs.items()}
        for name, wanted, measure in (
            ("break_even_cost", bool(self.at.under.course.changes), self._break_even),
            ("payback_periods", self.at.scenario.costs, self._payback),
        ):
            if wanted and not lost.any():
                drawn = None if scattered is None else measure(scattered)
                out[name] = alone(float(measure(estimate)[0]), drawn, self.level)
        return out

    def settled(self, shift: Array | None) -> tuple[dict[str, Pair], str]:
        """A period in the long run, and why there is none."""
        estimate = self._settle(None)
        reason = estimate[0].reason or estimate[1].reason
        drawn = None if self.draws is None or reason else self._settle(self.draws, shift)
        pairs = self._pairs(self._settled_figures(estimate), drawn and self._settled_figures(drawn), {})
        return {name: pair.only() for name, pair in pairs.items()}, reason

    # ---- inner ----
    def _pairs(self, figures: Figures, many: Figures | None, lost: Mapping[str, Flags]) -> dict[str, Pair]:
        """A Pair of each figure; lost : without and with the scenario, where nothing is known."""
        nowhere = np.zeros(2, dtype=bool)
        out = {}
        for name, two in figures.items():
            gone = lost.get(name, nowhere)
            base, changed = np.where(gone[0], np.nan, two[0][0]), np.where(gone[1], np.nan, two[1][0])
            out[name] = paired(base, changed, None if many is None else many[name], self.level)
        return out

    def _counts(self, paths: Both) -> Figures:
        """(D, H) customers of every quantity."""
        return {n: (paths[0].counts[:, 1:] @ w, paths[1].counts[:, 1:] @ w) for n, w in self.weights.items()}

    def _undefined(self) -> NDArray[np.bool_]:
        """(2, H+1, K) what can be reached from a state without data, without and with the scenario."""
        at = self.at
        out = np.zeros((2, at.periods + 1, len(at.schedule.states)), dtype=bool)
        if at.schedule.unknown:
            for n, (side, inflow) in enumerate(zip(at.sides, at.inflows(), strict=True)):
                out[n] = walk(side.course.explicit(at.periods), at.start, at.periods, inflow[0]).undefined
        return out

    def _money(self, paths: Both) -> Figures:
        """(D, H) discounted value, cost and net."""
        factor = self.at.discount
        base, changed = (factor * p.paid for p in paths)
        return _with_costs(base, changed, factor * self.at.costs(paths[1].treated))

    def _break_even(self, paths: Both) -> Array:
        factor = self.at.discount
        treated = paths[1].treated @ factor
        gain = (paths[1].paid - paths[0].paid - self.at.fixed_costs) @ factor
        return np.divide(gain, treated, out=np.full_like(gain, np.nan), where=treated > 0)

    def _payback(self, paths: Both) -> Array:
        base, net = self._money(paths)["net"]
        return payback(net - base, min(self.at.begins, self.at.periods - 1))

    def _settle(self, draws: Draws | None, shift: Array | None = None) -> tuple[Settled, Settled]:
        first, second = (
            settle(side.course, self.at.start, inflow, side.later_prices, draws=draws, shift=shift)
            for side, inflow in zip(self.at.sides, self.at.long_inflows(), strict=True)
        )
        return first, second

    def _settled_figures(self, sides: tuple[Settled, Settled]) -> Figures:
        """(D, 1) figures a period in the long run; money undiscounted."""
        out: Figures = {
            n: ((sides[0].counts @ w)[:, None], (sides[1].counts @ w)[:, None])
            for n, w in self.weights.items()
        }
        if self.at.money.terms is None:
            return out
        plan = self.at.scenario
        fixed = plan.fixed_cost if np.isinf(self.at.window.last) else 0.0
        cost = plan.cost_per_customer * sides[1].treated[:, None] + fixed
        return out | _with_costs(sides[0].paid[:, None], sides[1].paid[:, None], cost)


def _with_costs(base: Array, changed: Array, cost: Array) -> Figures:
    return {"value": (base, changed), "cost": (np.zeros_like(cost), cost), "net": (base, changed - cost)}


def _summed(figures: Figures) -> Figures:
    """Figures of all periods together, (D, 1)."""
    return {n: (a.sum(axis=1, keepdims=True), b.sum(axis=1, keepdims=True)) for n, (a, b) in figures.items()}
