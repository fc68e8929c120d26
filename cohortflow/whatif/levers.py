"""How much each move matters to a target: one point more, compensated by its balance, ranked with its doubt.

Slopes are those of effects.py; per point is a hundredth of one. Moves that do not occur have a slope but no
rank. Intervals and the chance of being the largest come from draws of the rates.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.projector import accept
from cohortflow.projector.delta import quantiles
from cohortflow.projector.unroll import drawn_schedule
from cohortflow.record import Record
from cohortflow.states import States
from cohortflow.whatif.change import PROPORTIONAL
from cohortflow.whatif.effects import Effects, effects, is_declared
from cohortflow.whatif.target import Target, resolve

Array = NDArray[np.float64]

DRAWS = 400
POINT = 0.01
COLUMNS = ["segment", "from", "to", "target", "per_point", "elasticity", "low", "high", "rank", "chance_best"]


@dataclass(frozen=True, repr=False, eq=False)
class Levers(Record):
    """Effect of one point more of each move on a target; arrays (K, K), row = from, NaN where there is none.

    effects : value of the target and slopes of the estimate;  drawn : (D, K, K) slopes of the draws, or None
    moves : those that compete for a rank, None = all that occur
    """

    schedule: Schedule
    target: Target
    balance: str | tuple[str, ...]
    effects: Effects
    moves: tuple[tuple[str, str], ...] | None
    drawn: Array | None
    level: float
    segment: str = "all"
    kind: ClassVar[str] = "levers"

    @property
    def value(self) -> float:
        """The target as it stands."""
        return self.effects.value

    @property
    def slope(self) -> Array:
        """(K, K) dF/dd, for a whole unit of probability."""
        return self.effects.slope

    @property
    def elasticity(self) -> Array:
        """(K, K) relative change of the target over relative change of the move."""
        return self.effects.elasticity

    @cached_property
    def ranked(self) -> NDArray[np.bool_]:
        """(K, K) moves that compete for a rank."""
        return _competing(self.schedule, self.moves) & np.isfinite(self.slope)

    @property
    def per_point(self) -> Array:
        """(K, K) change of the target for one point more."""
        return POINT * self.slope

    @cached_property
    def rank(self) -> Array:
        """(K, K) 1 = the largest effect of one point, in either direction; NaN for moves without a rank."""
        size = np.where(self.ranked, np.abs(self.slope), -1.0)
        order = np.argsort(-size.ravel(), kind="stable")
        out = np.empty(size.size)
        out[order] = np.arange(1.0, size.size + 1)
        return np.where(self.ranked, out.reshape(size.shape), np.nan)

    @cached_property
    def limits(self) -> tuple[Array, Array]:
        """(K, K) low and high of `per_point`."""
        if self.drawn is None:
            nothing = np.full_like(self.slope, np.nan)
            return nothing, nothing
        low, high = quantiles(POINT * self.drawn, self.level)
        known = np.isfinite(self.slope)
        return np.where(known, low, np.nan), np.where(known, high, np.nan)

    @cached_property
    def chance_best(self) -> Array:
        """(K, K) share of draws in which the move has the largest effect of one point."""
        if self.drawn is None:
            return np.full_like(self.slope, np.nan)
        size = np.where(self.ranked, np.abs(self.drawn), -1.0).reshape(len(self.drawn), -1)
        wins = np.bincount(np.nan_to_num(size, nan=-1.0).argmax(axis=1), minlength=self.slope.size)
        return np.where(self.ranked, (wins / len(size)).reshape(self.slope.shape), np.nan)

    def to_frame(self) -> pd.DataFrame:
        """The table `levers`: segment, from, to, target, per_point, elasticity, low, high, rank, chance_best.

        Ranked moves first, in their order; low, high: of per_point.
        """
        names = np.array(self.schedule.states.names, dtype=object)
        origin, to = np.nonzero(np.isfinite(self.slope))
        low, high = self.limits
        figures = {"per_point": self.per_point, "elasticity": self.elasticity, "low": low, "high": high,
                   "rank": self.rank, "chance_best": self.chance_best}  # fmt: skip
        whose = {
            "segment": self.segment,
            "from": names[origin],
            "to": names[to],
            "target": self.target.code,
        }
        frame = pd.DataFrame(whose | {name: values[origin, to] for name, values in figures.items()})
        return frame.sort_values("rank", kind="stable", na_position="last", ignore_index=True)[COLUMNS]

    def headline(self) -> str:
        frame = self.to_frame()
        best = frame.iloc[0] if len(frame) else None
        first = (
            ""
            if best is None
            else f'; most: "{best["from"]}" to "{best["to"]}" {best["per_point"]:+.4g} a point'
        )
        return f"levers of {self.target.code} ({self.value:,.4g}), {len(frame)} moves{first}"

    def about(self) -> Mapping[str, Any]:
        balance = self.balance if isinstance(self.balance, str) else list(self.balance)
        return {
            "target": self.target.code,
            "horizon": self.target.horizon,
            "value": self.value,
            "balance": balance,
            "level": self.level,
            "draws": 0 if self.drawn is None else len(self.drawn),
        }


def sensitivity(
    model: Any,
    *,
    target: str,
    horizon: int | None = None,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    moves: Iterable[tuple[str, str]] | None = None,
    balance: str | Iterable[str] = PROPORTIONAL,
    level: float = 0.90,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    covariance: str | None = None,
    base_period: str | int | None = None,
    segment: str = "all",
) -> Levers:
    """Rank every move by what one point more of it does to a target.

    Parameters
    ----------
    model : a Fit, Chain or Schedule
    target : "base:weekly" (at `horizon`), "settled_base", "life:fresh", "value" (over `horizon`, or for
        ever), "remaining_mix:weekly", "remaining_retention"; see target.py
    start, joiners, totals, base_period : as for `project`;  value : as for `what_if`
    moves : (from, to) pairs that compete for a rank; default: all that occur
    balance : what takes the opposite change, as in Change
    level, draws, rng, covariance : of the intervals and chances; a bare Chain has none unless Draws are given

    CallError for an unknown target or one that lacks an argument; NotIdentified where the model does not have
    it.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> found = sensitivity(chain, target="life:steady")  # 1 / (1 - p): dF/dp = 100, one point +1
    >>> round(found.value, 6), found.per_point[1, 1:].round(6)
    (10.0, array([ 1., -1.]))
    """
    schedule = accept.as_schedule(model)
    aim = resolve(
        schedule if start is not None else model, target, horizon=horizon, start=start, joiners=joiners,
        value=value, totals=totals, base_period=base_period,
    )  # fmt: skip
    paying = balance if balance == PROPORTIONAL else _named(balance, schedule.states)
    drawn = accept.draws_of(model, draws, accept.as_rng(rng), covariance)
    accept.as_level(level)
    found = effects(aim, schedule, paying)
    scattered = None if drawn is None else _scattered(aim, drawn, paying)
    chosen = None if moves is None else tuple((str(a), str(b)) for a, b in moves)
    return Levers(schedule, aim, paying, found, chosen, scattered, level, segment)


def _scattered(target: Target, draws: Draws, balance: str | tuple[str, ...]) -> Array:
    """(D, K, K) slopes; NaN throughout for a draw that does not have the figure."""
    size = len(draws.schedule.states)
    out = np.full((draws.size, size, size), np.nan)
    for d in range(draws.size):
        try:
            out[d] = effects(target, drawn_schedule(draws, d), balance).slope
        except NotIdentified:
            continue
    return out


def _competing(schedule: Schedule, moves: Sequence[tuple[str, str]] | None) -> NDArray[np.bool_]:
    """(K, K) moves that get a rank: the named ones, else all that occur."""
    states = schedule.states
    occurs = np.zeros((len(states), len(states)), dtype=bool)
    if moves is not None:
        for origin, to in moves:
            occurs[states.index(origin), states.index(to)] = True
        return occurs
    for part in schedule.components:
        held = (np.nan_to_num(part.matrices) > 0).any(axis=0)
        if is_declared(part, states):
            occurs |= held
        else:
            fold = part.collapse(len(states))
            occurs |= fold.T @ held @ fold > 0
    return occurs


def _named(balance: str | Iterable[str], states: States) -> tuple[str, ...]:
    names = (balance,) if isinstance(balance, str) else tuple(balance)
    if not names:
        raise CallError(
            f'balance is empty; name moves of the row, or "{PROPORTIONAL}" ({listed(states.names)}).'
        )
    for name in names:
        states.index(name)
    return names
