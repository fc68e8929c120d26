"""The projection: customers by state for the periods ahead, with bands, their parts, and the roll-forward."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.bands import check_parts, drawn_means, moments, quantile_band, simulate
from cohortflow.projector.joiners import Joiners, nobody, period_label, planned_numbers
from cohortflow.projector.mix import Walk, walk
from cohortflow.projector.rollforward import forecast_lines
from cohortflow.record import Record, frozen_array, frozen_mapping

DRAWS = 2000


@dataclass(frozen=True, repr=False, eq=False)
class Projection(Record):
    """A base projected H periods ahead.

    schedule, joiners, base_period (ordinal or None), level, parts : what it was made from
    walk : exact expected counts, moves and inflow
    simulated : (D, H+1, K) drawn customers by state; exits: lost since the opening
    weights : quantity -> (K,): each state but the exits, `all_live`, the named totals
    variances : part -> (H+1, Q) variance of each quantity of `weights`, then of each exit
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
        """segment, period, periods_ahead, quantity, rates, chance, common_shocks, joiners, total (variances)."""
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
        """The table `rollforward`, forecast rows: closing = opening + joined + returned - lost + moved in - out."""
        return forecast_lines(
            self.schedule.states, self.walk, self.joiners, self.labels[1:], segment=self.segment
        )

    def headline(self) -> str:
        live = self.expected("all_live")
        low, high = quantile_band(self.paths("all_live")[:, -1], self.level)
        return (
            f"projection of {self.periods} periods ({self.schedule.calendar.kind}): all_live {live[0]:,.0f} to "
            f"{live[-1]:,.0f}, {self.level:.0%} band {low:,.0f} to {high:,.0f}"
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


def project(
    model: Any,
    *,
    periods: int,
    start: Any = None,
    joiners: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    level: float = 0.90,
    rng: int | np.random.Generator = 1,
    draws: Draws | int = DRAWS,
    shocks: Draws | None = None,
    parts: Sequence[str] | None = None,
    covariance: str | None = None,
    base_period: str | int | None = None,
    segment: str = "all",
) -> Projection:
    """Project a base: expected customers by state (exact), with bands from simulation.

        x_{h+1} = x_h P_h + joiners_{h+1} + returners_{h+1}

    Parameters
    ----------
    model : a Fit (brings opening counts, draws of its rates, the calendar), a Chain or a Schedule
    periods : H, how far
    start : customers by state at the end of the base period (default: the last mix of the Fit's tally)
    joiners : Joiners, or numbers a period by state; None: a closed base
    totals : named sums of states that get their own band, beside `all_live`
    level : of the bands;  rng : seed or Generator
    draws : how many, or Draws made before;  covariance : which kind the Fit draws from
    shocks : Draws with matrices for each period ahead ("common_shocks"); they hold the rates part as well
    parts : which of rates, chance, common_shocks, joiners make the band; default: all that are known
    base_period : label or ordinal, where the Fit or the start does not tell

    Raises CallError for unusable arguments. A state that can be reached from one without data is NaN.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> ahead = project(chain, start={"fresh": 100}, periods=2, joiners={"fresh": 50})
    >>> ahead.mean
    array([[100.,   0.,   0.],
           [ 50.,  80.,  20.],
           [ 50., 112.,  38.]])
    """
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "A projection")
    states, steps = schedule.states, accept.as_periods(periods)
    counts = accept.opening(model, start, states)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    generator = accept.as_rng(rng)
    coming = as_joiners(joiners, schedule, base, steps)
    drawn = accept.draws_of(model, draws, generator, covariance)
    chosen = _choose_parts(parts, drawn, shocks, coming)
    weights = accept.weights_of(states, totals)
    central = walk(schedule, counts, steps, coming.expected(), first_step=first)
    simulated = simulate(
        schedule,
        counts,
        steps,
        size=_size(draws, drawn, shocks if "common_shocks" in chosen else None),
        rng=generator,
        draws=shocks if "common_shocks" in chosen else drawn if "rates" in chosen else None,
        joiners=coming,
        chance="chance" in chosen,
        joiners_vary="joiners" in chosen,
        first_step=first,
    )
    simulated[:, central.undefined] = np.nan
    spread = _variances(schedule, counts, steps, coming, drawn, shocks, chosen, weights, first)
    for values in spread.values():
        values[np.isnan(_by_quantity(central.counts, weights, states.exit_mask))] = np.nan
    return Projection(
        schedule, coming, base, accept.as_level(level), chosen, central, frozen_array(simulated),
        frozen_mapping(weights), frozen_mapping(spread), segment,
        tuple(f"rows_without_data:{s}" for s in schedule.unknown),
    )  # fmt: skip


def as_joiners(joiners: Any, schedule: Schedule, base: int | None, periods: int) -> Joiners:
    """Joiners as a record, cut to the periods asked for; None is nobody, numbers are taken as planned."""
    if joiners is None:
        return nobody(schedule.states, schedule.calendar, base, periods)
    if isinstance(joiners, Joiners):
        if joiners.states.names != schedule.states.names:
            raise CallError("The joiners and the model have different states; forecast them from one tally.")
        if base is not None and joiners.base is not None and joiners.base != base:
            raise CallError(
                f"The joiners are forecast from {schedule.calendar.label(joiners.base)}, the base is counted in "
                f"{schedule.calendar.label(base)}; both must start from one period."
            )
        return joiners.cut(periods)
    return planned_numbers(schedule.states, joiners, periods=periods, calendar=schedule.calendar, base=base)


def ratio(part: Array, whole: Array) -> Array:
    """part / whole, NaN where nobody is left."""
    return np.divide(part, whole, out=np.full_like(part, np.nan), where=whole > 0)


def nan_product(values: Array, weight: Array) -> Array:
    """values @ weight, in which NaN counts only where the weight is not 0."""
    return values[..., weight != 0] @ weight[weight != 0]


def _choose_parts(
    parts: Sequence[str] | None, drawn: Draws | None, shocks: Draws | None, joiners: Joiners
) -> tuple[str, ...]:
    known = {"rates": drawn is not None or shocks is not None, "chance": True}
    known |= {"common_shocks": shocks is not None, "joiners": bool(joiners.expected().any())}
    if parts is None:
        return tuple(part for part, available in known.items() if available)
    chosen = check_parts(parts)
    if "rates" in chosen and not known["rates"]:
        raise CallError(
            'The part "rates" needs to know how uncertain the rates are: project a Fit, or pass draws=.'
        )
    if "common_shocks" in chosen and shocks is None:
        raise CallError('The part "common_shocks" needs draws of future periods: pass shocks=.')
    if "common_shocks" in chosen and "rates" not in chosen:
        raise CallError('Draws of shocks hold the error of the rates as well; name the part "rates" too.')
    return chosen


def _size(draws: Draws | int, drawn: Draws | None, shocks: Draws | None) -> int:
    if shocks is not None:
        return shocks.size
    if drawn is not None:
        return drawn.size
    if isinstance(draws, Draws) or isinstance(draws, bool) or draws < 2:
        raise CallError(f"draws is {draws!r}; it takes Draws, or a whole number of draws, at least 2.")
    return int(draws)


def _variances(
    schedule: Schedule,
    counts: Array,
    periods: int,
    joiners: Joiners,
    drawn: Draws | None,
    shocks: Draws | None,
    chosen: tuple[str, ...],
    weights: Mapping[str, Array],
    first: int,
) -> dict[str, Array]:
    """part -> (H+1, Q) variances: chance and joiners exact, rates and shocks over the draws' expected counts."""
    exits = schedule.states.exit_mask
    exact = moments(schedule, counts, periods, joiners=joiners, first_step=first)
    over = {
        name: _by_quantity(
            drawn_means(d, counts, periods, inflow=joiners.expected(), first_step=first), weights, exits
        ).var(axis=0, ddof=1)
        for name, d in (("rates", drawn), ("both", shocks))
        if d is not None
    }
    rates = over.get("rates", over.get("both"))
    found = {
        "rates": rates,
        "chance": _quadratic(exact.chance, weights, exits),
        "common_shocks": np.maximum(over["both"] - rates, 0.0) if "both" in over else None,
        "joiners": _quadratic(exact.joiners, weights, exits),
    }
    none = np.zeros_like(found["chance"])
    return {part: np.array(value) if part in chosen else none.copy() for part, value in found.items()}


def _columns(weights: Mapping[str, Array], exits: Array) -> Array:
    """(K, Q) weights of every quantity, the exits last."""
    return np.column_stack([*weights.values(), *np.eye(len(exits))[exits]])


def _by_quantity(values: Array, weights: Mapping[str, Array], exits: Array) -> Array:
    """(..., K) to (..., Q)."""
    return np.stack([nan_product(values, w) for w in _columns(weights, exits).T], axis=-1)


def _quadratic(covariance: Array, weights: Mapping[str, Array], exits: Array) -> Array:
    """(H+1, K, K) to (H+1, Q) variances."""
    w = _columns(weights, exits)
    return np.maximum(np.einsum("kq,hkl,lq->hq", w, covariance, w), 0.0)
