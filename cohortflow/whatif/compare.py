r"""What a scenario changes: the same forecast twice, with it and without, draw by draw.

    value    contribution of a period to the money of those there at its start, discounted as `value` does it
    cost     (cost per customer x customers treated at the period's start + fixed cost) while it is in force,
             discounted in the same way
    net      value with the scenario - value without - cost
    payback  periods from the scenario's first until the summed net is, and stays, not below 0 (inf: not
             within the horizon)
    break-even cost   (gain in value - fixed costs) / customers treated, all discounted: at this cost per
             customer the net is 0

Joiners pay from the period after the one they join in. Intervals are quantiles of paired draws: both
forecasts share each draw's rates and joiners, so what is uncertain in both alike drops out. They hold
expectations; the luck of single customers is in the bands of `project`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.chain import Schedule
from cohortflow.projector.joiners import period_label
from cohortflow.record import Record, frozen_mapping
from cohortflow.whatif.scenario import Scenario

Array = NDArray[np.float64]

TOTAL, SETTLED = "total", "settled"
COLUMNS = [
    "segment", "scenario", "period", "quantity", "base", "with_change", "difference", "low", "high", "cost",
    "net",
]  # fmt: skip


@dataclass(frozen=True, eq=False)
class Pair:
    """One quantity without and with the scenario: arrays over periods, or numbers.

    drawn : makes the differences of all draws (..., D); None without draws. Limits are made when asked for.
    """

    base: Any
    changed: Any
    drawn: Callable[[], Array] | None
    level: float

    @property
    def difference(self) -> Any:
        return self.changed - self.base

    @property
    def low(self) -> Any:
        """Lower limit of the difference."""
        return self._limits[0]

    @property
    def high(self) -> Any:
        """Upper limit of the difference."""
        return self._limits[1]

    @cached_property
    def _limits(self) -> tuple[Any, Any]:
        known = ~np.isnan(self.difference)
        found = np.full((2, *np.shape(self.base)), np.nan)
        if self.drawn is not None:
            found = np.where(known, limits(self.drawn(), self.level), np.nan)
        low, high = found
        return (float(low), float(high)) if low.ndim == 0 else (low, high)


@dataclass(frozen=True, repr=False, eq=False)
class WhatIf(Record):
    """A scenario compared with the forecast as it stands.

    by_period : quantity -> Pair of (H,) arrays, periods 1 .. H: states, all_live, totals, exits (lost since
        the opening), and with money value, cost, net
    total : over all H periods: value, cost, net, break_even_cost, payback_periods
    settled : per period in the long run (with constant joiners): the same quantities; exits: lost a period
    reasons : codes, for instance "settled:grows_without_limit", "change_cut_short_in_draws:0.01"
    """

    scenario: Scenario
    schedule: Schedule
    base_period: int | None
    by_period: Mapping[str, Pair]
    total: Mapping[str, Pair]
    settled: Mapping[str, Pair]
    level: float
    method: str
    draws: int
    currency: str = ""
    reasons: tuple[str, ...] = ()
    segment: str = "all"
    kind: ClassVar[str] = "what_if"

    def __post_init__(self) -> None:
        for name in ("by_period", "total", "settled"):
            object.__setattr__(self, name, frozen_mapping(getattr(self, name)))

    @property
    def periods(self) -> int:
        """H."""
        return len(self.by_period["all_live"].base)

    @property
    def labels(self) -> list[str | None]:
        """Labels of the periods 1 .. H; None outside a calendar."""
        return [period_label(self.schedule.calendar, self.base_period, h + 1) for h in range(self.periods)]

    def at_horizon(self, quantity: str) -> Pair:
        """One quantity in the last period."""
        pair = self.by_period[quantity]
        drawn = pair.drawn
        last = None if drawn is None else lambda: drawn()[-1]
        return Pair(float(pair.base[-1]), float(pair.changed[-1]), last, pair.level)

    def to_frame(self) -> pd.DataFrame:
        """The table `scenarios`: segment, scenario, period, quantity, base, with_change, difference, low,
        high, cost, net.

        low, high: of the difference. period: a label, "total" (all periods together) or "settled" (a period
        in the long run). cost and net stand beside the quantity value.
        """
        labels = [p if p is not None else str(h + 1) for h, p in enumerate(self.labels)]
        frames = [_rows(pair, labels, quantity) for quantity, pair in self.by_period.items()]
        for label, group in ((TOTAL, self.total), (SETTLED, self.settled)):
            frames += [_rows(pair, [label], quantity) for quantity, pair in group.items()]
        frame = pd.concat(frames, ignore_index=True)
        money = frame[frame["quantity"].isin(["cost", "net"])].set_index(["period", "quantity"])["difference"]
        for name in ("cost", "net"):
            beside = frame["quantity"] == "value"
            found = [money.get((period, name), np.nan) for period in frame.loc[beside, "period"]]
            frame.loc[beside, name] = np.array(found, dtype=float)
        return frame.assign(segment=self.segment, scenario=self.scenario.name).reindex(columns=COLUMNS)

    def headline(self) -> str:
        live = self.at_horizon("all_live")
        said = (
            f'what if "{self.scenario.name}": all_live {live.difference:+,.0f} after {self.periods} periods'
        )
        if np.isfinite(live.low):
            said += f" ({self.level:.0%}: {live.low:+,.0f} to {live.high:+,.0f})"
        if "net" in self.total:
            said += f", net {self.total['net'].difference:+,.0f} {self.currency or 'money'}"
        return said

    def about(self) -> Mapping[str, Any]:
        return {
            "scenario": self.scenario.name,
            "case": self.scenario.case,
            "level": self.level,
            "method": self.method,
            "draws": self.draws,
            "base_period": period_label(self.schedule.calendar, self.base_period, 0),
            "reasons": list(self.reasons),
        }


def _rows(pair: Pair, labels: list[str], quantity: str) -> pd.DataFrame:
    columns = {"base": pair.base, "with_change": pair.changed, "difference": pair.difference,
               "low": pair.low, "high": pair.high}  # fmt: skip
    return pd.DataFrame(
        {"period": labels, "quantity": quantity, **{k: np.atleast_1d(v) for k, v in columns.items()}}
    )


def limits(drawn: Array, level: float) -> Array:
    """(2, ...) quantiles over draws (last axis) around the median; NaN where any draw is.

    Interpolated between draws, but not where one of them is infinite.

    >>> limits(np.arange(11.0)[None], 0.8).ravel()
    array([1., 9.])
    """
    last = drawn.shape[-1] - 1
    places = [(1 - level) / 2 * last, (1 + level) / 2 * last]
    below = [int(place) for place in places]
    above = [min(place + 1, last) for place in below]
    ordered = np.partition(drawn, sorted({*below, *above}), axis=-1)
    found = [
        _between(ordered[..., lo], ordered[..., hi], p - lo)
        for p, lo, hi in zip(places, below, above, strict=True)
    ]
    return np.where(np.isnan(drawn).any(axis=-1), np.nan, found)


def _between(low: Array, high: Array, share: float) -> Array:
    finite = np.isfinite(low) & np.isfinite(high)
    step = np.subtract(high, low, out=np.zeros_like(high), where=finite)
    return np.where(finite, low + share * step, high if share > 0 else low)


def payback(net: Array, first: int) -> Array:
    """(D,) periods from step `first` until the summed net (H, D) is, and stays, not below 0; inf: not within
    H.

    >>> payback(np.array([[0.0, 0], [-5, -5], [3, 1], [3, 1]]), 1)
    array([ 3., inf])
    """
    summed = net[first:].cumsum(axis=0)
    below = summed < -1e-9 * np.maximum(np.abs(net).max(axis=0), 1e-300)
    late = len(below) - np.argmax(below[::-1], axis=0)  # periods up to the last one below 0
    found = np.where(below.any(axis=0), late + 1.0, 1.0)
    return np.where(found <= len(below), found, np.inf)
