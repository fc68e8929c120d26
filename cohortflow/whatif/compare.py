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

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.chain import Schedule
from cohortflow.projector.bands import quantile_band
from cohortflow.projector.delta import quantiles
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
    """One quantity without and with the scenario, and the limits of the difference; arrays over periods or
    numbers.
    """

    base: Any
    changed: Any
    low: Any
    high: Any

    @property
    def difference(self) -> Any:
        return self.changed - self.base

    def only(self) -> Pair:
        """A Pair of numbers out of one of arrays of length 1."""
        return Pair(*(float(v[0]) for v in (self.base, self.changed, self.low, self.high)))


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
        return Pair(*(float(np.asarray(v)[-1]) for v in (pair.base, pair.changed, pair.low, pair.high)))

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


def paired(base: Array, changed: Array, drawn: tuple[Array, Array] | None, level: float) -> Pair:
    """A Pair of (H,) arrays from the estimate and, if there are draws, (D, H) values without and with."""
    if drawn is None:
        nothing = np.full_like(base, np.nan)
        return Pair(base, changed, nothing, nothing)
    low, high = quantile_band(drawn[1] - drawn[0], level)
    lost = np.isnan(base + changed)
    return Pair(base, changed, np.where(lost, np.nan, low), np.where(lost, np.nan, high))


def alone(value: float, drawn: Array | None, level: float) -> Pair:
    """A figure that only the scenario has (payback, break-even cost): base 0, infinities kept."""
    low, high = (np.nan, np.nan) if drawn is None else (v[0] for v in quantiles(drawn[:, None], level))
    return Pair(0.0, value, float(low), float(high))


def payback(net: Array, first: int) -> Array:
    """(D,) periods from step `first` until the summed net (D, H) is, and stays, not below 0; inf: not within
    H.

    >>> payback(np.array([[0.0, -5.0, 3.0, 3.0], [0.0, -5.0, 1.0, 1.0]]), 1)
    array([ 3., inf])
    """
    ahead = net[:, first:].cumsum(axis=1) >= -1e-9 * np.maximum(
        np.abs(net).max(axis=1, keepdims=True), 1e-300
    )
    stays = np.flip(np.cumprod(np.flip(ahead, axis=1), axis=1), axis=1).astype(bool)
    found = np.argmax(stays, axis=1) + 1.0
    return np.where(stays.any(axis=1), found, np.inf)
