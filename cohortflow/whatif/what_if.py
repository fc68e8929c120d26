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


def _reasons(at: Setting, why: str, scattered: tuple[Paths, Paths] | None) -> tuple[str, ...]:
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

    def paths(self, inflows: Two, draws: Draws | None, shift: Array | None = None) -> tuple[Paths, Paths]:
        start = self.at.start
        first, second = (
            walk_paths(side.course, start, inflow, side.prices, draws=draws, shift=shift)
            for side, inflow in zip(self.at.sides, inflows, strict=True)
        )
        return first, second

    def by_period(
        self, estimate: tuple[Paths, Paths], scattered: tuple[Paths, Paths] | None
    ) -> dict[str, Pair]:
        """Customers of every quantity; discounted value, cost and net."""
        unknown = self._undefined()
        out = {}
        for name, weight in self.weights.items():
            lost = unknown[:, 1:, weight != 0].any(axis=2)
            two, many = (
                None if paths is None else tuple(p.counts[:, 1:] @ weight for p in paths)
                for paths in (estimate, scattered)
            )
            out[name] = self._pair(two, many, lost)
        if self.at.money.terms is None:
            return out
        lost = unknown[:, 1:].any(axis=2)
        figures, many = (None if paths is None else self._money(paths) for paths in (estimate, scattered))
        assert figures is not None
        return out | {
            n: self._pair(two, None if many is None else many[n], lost) for n, two in figures.items()
        }

    def total(
        self,
        by_period: Mapping[str, Pair],
        estimate: tuple[Paths, Paths],
        scattered: tuple[Paths, Paths] | None,
    ) -> dict[str, Pair]:
        """Over all periods: value, cost, net; the cost that breaks even; when it has paid."""
        if self.at.money.terms is None:
            return {}
        lost = np.isnan([by_period["net"].base, by_period["net"].changed]).any(axis=1)
        figures, many = (
            None
            if p is None
            else {n: tuple(v.sum(axis=1, keepdims=True) for v in two) for n, two in m.items()}
            for p, m in ((p, None if p is None else self._money(p)) for p in (estimate, scattered))
        )
        out = {
            n: self._pair(two, None if many is None else many[n], lost).only() for n, two in figures.items()
        }
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
        figures, many = (None if s is None else self._settled_figures(s) for s in (estimate, drawn))
        assert figures is not None
        pairs = {n: self._pair(two, None if many is None else many[n]).only() for n, two in figures.items()}
        return pairs, reason

    # ---- inner ----
    def _pair(self, two: Any, many: Any, lost: Any = (False, False)) -> Pair:
        """lost : without and with the scenario, where nothing is known"""
        base, changed = (np.where(gone, np.nan, v[0]) for v, gone in zip(two, lost, strict=True))
        return paired(base, changed, many, self.level)

    def _undefined(self) -> NDArray[np.bool_]:
        """(2, H+1, K) what can be reached from a state without data, without and with the scenario."""
        at = self.at
        out = np.zeros((2, at.periods + 1, len(at.schedule.states)), dtype=bool)
        if at.schedule.unknown:
            for n, (side, inflow) in enumerate(zip(at.sides, at.inflows(), strict=True)):
                out[n] = walk(side.course.explicit(at.periods), at.start, at.periods, inflow[0]).undefined
        return out

    def _money(self, paths: tuple[Paths, Paths]) -> dict[str, Two]:
        """(D, H) discounted value, cost and net."""
        factor = self.at.discount
        base, changed = (factor * p.paid for p in paths)
        cost = factor * self.at.costs(paths[1].treated)
        return {
            "value": (base, changed),
            "cost": (np.zeros_like(cost), cost),
            "net": (base, changed - cost),
        }

    def _break_even(self, paths: tuple[Paths, Paths]) -> Array:
        factor = self.at.discount
        treated = paths[1].treated @ factor
        gain = (paths[1].paid - paths[0].paid - self.at.fixed_costs) @ factor
        return np.divide(gain, treated, out=np.full_like(gain, np.nan), where=treated > 0)

    def _payback(self, paths: tuple[Paths, Paths]) -> Array:
        base, net = self._money(paths)["net"]
        return payback(net - base, min(self.at.begins, self.at.periods - 1))

    def _settle(self, draws: Draws | None, shift: Array | None = None) -> tuple[Settled, Settled]:
        first, second = (
            settle(side.course, self.at.start, inflow, side.later_prices, draws=draws, shift=shift)
            for side, inflow in zip(self.at.sides, self.at.long_inflows(), strict=True)
        )
        return first, second

    def _settled_figures(self, sides: tuple[Settled, Settled]) -> dict[str, Two]:
        """(D, 1) figures a period in the long run; money undiscounted."""
        out = {n: tuple((s.counts @ w)[:, None] for s in sides) for n, w in self.weights.items()}
        if self.at.money.terms is not None:
            stays, plan = np.isinf(self.at.window.last), self.at.scenario
            base, changed = (s.paid[:, None] for s in sides)
            cost = plan.cost_per_customer * sides[1].treated[:, None] + plan.fixed_cost * stays
            out |= {"value": (base, changed), "cost": (0 * cost, cost), "net": (base, changed - cost)}
        return out  # type: ignore[return-value]
