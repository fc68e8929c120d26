"""The record of a projection: its table, the parts of its bands, its roll-forward, the drawn paths."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Schedule
from cohortflow.projector.accept import Array
from cohortflow.projector.bands import quantile_band
from cohortflow.projector.joiners import Joiners, period_label
from cohortflow.projector.mix import Walk
from cohortflow.projector.rollforward import forecast_lines
from cohortflow.record import Record


@dataclass(frozen=True, repr=False, eq=False)
class Projection(Record):
    """A base projected H periods ahead.

    schedule, joiners, base_period (ordinal or None), level, parts : what it was made from
    walk : exact expected counts, moves and inflow
    simulated : (D, H+1, K) drawn customers by state; exits: lost since the opening
    weights : quantity -> (K,): each state but the exits, `all_live`, the named totals
    variances : part -> (H+1, Q) variance of each quantity of `weights`, then of each exit
    adjusted : (H, K) customers laid over by hand
    reasons : codes, for instance "rows_without_data:paused"
    """

    schedule: Schedule
    joiners: Joiners
    base_period: int | None
    level: float
    parts: tuple[str, ...]
    walk: Walk
    simulated: Array
    weights: Mapping[str, Array]
    variances: Mapping[str, Array]
    adjusted: Array
    segment: str = "all"
    reasons: tuple[str, ...] = ()
    kind: ClassVar[str] = "projection"

    @property
    def mean(self) -> Array:
        """(H+1, K) expected customers by state; exits: lost since the opening."""
        return self.walk.counts

    @property
    def periods(self) -> int:
        """H."""
        return len(self.walk.flows)

    @property
    def exits_lost(self) -> pd.DataFrame:
        """Expected customers lost since the opening, one column an exit, index periods ahead."""
        states = self.schedule.states
        return pd.DataFrame(self.mean[:, states.exit_mask], columns=list(states.exits))

    @property
    def quantities(self) -> tuple[str, ...]:
        """States that are not exits, `all_live`, the named totals, then the exits."""
        return (*self.weights, *self.schedule.states.exits)

    def paths(self, quantity: str) -> Array:
        """(D, H+1) drawn values of one quantity, for scores and comparisons of one's own."""
        return self.simulated @ self._weight(quantity)

    def expected(self, quantity: str) -> Array:
        """(H+1,) exact mean of one quantity."""
        return nan_product(self.mean, self._weight(quantity))

    @cached_property
    def frame(self) -> pd.DataFrame:
        """The table `projection`; see `to_frame`."""
        return pd.concat([self._rows(q) for q in self.quantities], ignore_index=True)

    def to_frame(self) -> pd.DataFrame:
        """segment, period, periods_ahead, state, customers, low, high, share, share_low, share_high, level.

        Share: of those who have not left (for an exit: of the opening and all who joined or returned since).
        """
        return self.frame

    @cached_property
    def band_parts(self) -> pd.DataFrame:
        """Variances: segment, period, periods_ahead, quantity, the four parts, total."""
        steps = self.periods + 1
        rows = {
            "segment": self.segment,
            "period": self.labels * len(self.quantities),
            "periods_ahead": np.tile(np.arange(steps), len(self.quantities)),
            "quantity": np.repeat(np.array(self.quantities, dtype=object), steps),
        }
        columns = {part: values.T.ravel() for part, values in self.variances.items()}
        return pd.DataFrame({**rows, **columns, "total": sum(columns.values())})

    @cached_property
    def rollforward(self) -> pd.DataFrame:
        """The table `rollforward`, forecast rows; every state closes (see rollforward.py)."""
        return forecast_lines(
            self.schedule.states,
            self.walk,
            self.joiners,
            self.labels[1:],
            adjusted=self.adjusted,
            segment=self.segment,
        )

    def headline(self) -> str:
        live = self.expected("all_live")
        low, high = quantile_band(self.paths("all_live")[:, -1], self.level)
        return (
            f"projection of {self.periods} periods ({self.schedule.calendar.kind}): all_live {live[0]:,.0f} "
            f"to {live[-1]:,.0f}, {self.level:.0%} band {low:,.0f} to {high:,.0f}"
        )

    def about(self) -> Mapping[str, Any]:
        return {
            "level": self.level,
            "parts": list(self.parts),
            "draws": len(self.simulated),
            "base_period": period_label(self.schedule.calendar, self.base_period, 0),
            "joiners": self.joiners.method,
            "reasons": list(self.reasons),
        }

    # ---- inner ----
    def _weight(self, quantity: str) -> Array:
        if quantity in self.weights:
            return self.weights[quantity]
        return np.eye(len(self.schedule.states))[self.schedule.states.index(quantity)]

    @property
    def labels(self) -> list[str | None]:
        """Labels of the base period and the H ahead; None outside a calendar."""
        return [period_label(self.schedule.calendar, self.base_period, h) for h in range(self.periods + 1)]

    def _rows(self, quantity: str) -> pd.DataFrame:
        base = ~self.schedule.states.exit_mask.astype(bool)
        gone = quantity in self.schedule.states.exits
        whole = np.ones(len(base)) if gone else base.astype(float)
        value, paths = self.expected(quantity), self.paths(quantity)
        low, high = quantile_band(paths, self.level)
        share = ratio(value, nan_product(self.mean, whole))
        share_low, share_high = quantile_band(ratio(paths, self.simulated @ whole), self.level)
        return pd.DataFrame(
            {
                "segment": self.segment,
                "period": self.labels,
                "periods_ahead": np.arange(self.periods + 1),
                "state": quantity,
                "customers": value,
                "low": low,
                "high": high,
                "share": share,
                "share_low": share_low,
                "share_high": share_high,
                "level": self.level,
            }
        )


def ratio(part: Array, whole: Array) -> Array:
    """part / whole, NaN where nobody is left."""
    return np.divide(part, whole, out=np.full_like(part, np.nan), where=whole > 0)


def nan_product(values: Array, weight: Array) -> Array:
    """values @ weight, in which NaN counts only where the weight is not 0."""
    return values[..., weight != 0] @ weight[weight != 0]
