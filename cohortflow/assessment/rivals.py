"""Forecasts without a chain, which a chain must beat to be worth its trouble.

last_mix        the base stays as it is: x_{o+h} = x_o; of the customers of now, nobody leaves
constant_churn  one churn rate for all: r_h = r_{h-1} (1 - c) + joiners, c = exits / at risk up to the origin;
                split over the states as at the origin
last_year       the base as it was in the same period a year before; of the customers of now, the share is
                still live that was of those a year before
cohort_curve    every cohort keeps the share that earlier cohorts kept at the same age; customers whose joining
                was not seen keep what their like kept, age unknown

Joiners of the second and fourth: as many as in the same period a year before, else the mean of what was seen
since. Each rival's band comes from how wrong it was at earlier origins: forecast +- t x root mean square error of
its h-step forecasts that had come true by the origin.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from cohortflow.tally import KINDS, Tally

Array = NDArray[np.float64]

FEWEST_ERRORS = 4  # past errors from which a rival's band is made
AGED = 30  # customers at an age from which its own retention is used, else that of all older ages
STARTED = 3  # periods of history before a rival's first forecast


@dataclass(frozen=True, eq=False)
class Observed:
    """What happened, as arrays over the T periods of the window.

    mix : (T, K) customers by state at the end of each period, exits 0
    joiners : (T, K) who joined or returned in it and were there at its end
    moves : (T-1, K, K) one-period moves by origin period
    kept : (T, H+1, K) of the customers in each state, the number live h periods later (NaN: not known)
    ages : (T, A) live customers by period and age, of those whose joining was seen
    live : (K,) bool;  exits : (K,) bool;  cycle : periods in a cycle of seasons;  first : ordinal of period 0
    """

    mix: Array
    joiners: Array
    moves: Array
    kept: Array
    ages: Array
    live: NDArray[np.bool_]
    exits: NDArray[np.bool_]
    cycle: int
    first: int

    @classmethod
    def of(cls, tally: Tally, horizon: int) -> Observed:
        """From the tally; parts that it does not hold are NaN."""
        size, first, last = len(tally.states), tally.meta.first, tally.meta.last
        periods = last - first + 1
        mix = np.array([tally.mix(t).to_numpy(float) for t in range(first, last + 1)])
        joiners = np.full((periods, size), np.nan)
        if "starts" in tally.meta.tables:
            joiners = sum((tally.joiners(k)[1] for k in KINDS[:2]), np.zeros((periods, size)))
        moves = np.zeros((periods - 1, size, size))
        where, cube = tally.counts_by_period()
        moves[where - first] = cube
        states = tally.states
        kept = _kept(tally, mix, horizon)
        return cls(
            mix, joiners, moves, kept, _ages(tally), states.live_mask, states.exit_mask,
            tally.calendar.cycle, first,
        )  # fmt: skip

    @property
    def all_live(self) -> Array:
        """(T,)."""
        return self.mix @ self.live

    def of_origin(self, origin: int) -> Array:
        """(H+1,) customers of period `origin` who are live 0 .. H periods later."""
        return self.kept[origin].sum(axis=1)


def _kept(tally: Tally, mix: Array, horizon: int) -> Array:
    """(T, H+1, K): customers of each state live later, from `steps`; those lost to view follow the others."""
    periods, size = mix.shape
    out = np.full((periods, horizon + 1, size), np.nan)
    out[:, 0] = mix * tally.states.live_mask
    if "steps" not in tally.meta.tables:
        return out
    rows = tally.table("steps")
    rows = rows[(rows["k"] >= 1) & (rows["k"] <= horizon)]
    at = (rows["period"].to_numpy() - tally.meta.first, rows["k"].to_numpy(), rows["state"].to_numpy())
    followed, live = np.zeros((2, periods, horizon + 1, size))
    np.add.at(followed, at, rows["n"].to_numpy(float))
    np.add.at(live, at, rows["n"].to_numpy(float) * tally.states.live_mask[rows["later"].to_numpy()])
    for h in range(1, horizon + 1):
        if not followed[:, h].any():
            continue
        share = np.divide(
            live[:, h], followed[:, h], out=np.full(mix.shape, np.nan), where=followed[:, h] > 0
        )
        seen = np.arange(periods) + h < periods
        out[seen, h] = np.where(mix[seen] > 0, mix[seen] * share[seen], 0.0)
    return out


def _ages(tally: Tally) -> Array:
    """(T, A) live customers by period and age."""
    first, periods = tally.meta.first, tally.meta.last - tally.meta.first + 1
    rows = tally.tables["ages"]
    rows = rows[tally.states.live_mask[rows["state"].to_numpy()]]
    age = rows["age"].to_numpy()
    out = np.zeros((periods, int(age.max(initial=0)) + 1))
    period = rows["joined"].to_numpy() + age - first
    inside = (period >= 0) & (period < periods)
    np.add.at(out, (period[inside], age[inside]), rows["n"].to_numpy(float)[inside])
    return out


# ---- one forecast each: (H+1, K) base, (H+1,) live customers of the origin; NaN: nothing to say ----
Forecast = tuple[Array, Array]


def last_mix(seen: Observed, o: int, horizon: int) -> Forecast:
    """Everything stays as it is."""
    base = np.tile(seen.mix[o], (horizon + 1, 1))
    return base, base @ seen.live


def constant_churn(seen: Observed, o: int, horizon: int) -> Forecast:
    """One churn rate for the total."""
    moves = seen.moves[:o].sum(axis=0)
    at_risk = moves[~seen.exits].sum()
    rate = moves[~seen.exits][:, seen.exits].sum() / at_risk if at_risk else np.nan
    coming = simple_joiners(seen, o, horizon).sum(axis=1)
    total = np.empty(horizon + 1)
    total[0] = seen.mix[o].sum()
    for h in range(1, horizon + 1):
        total[h] = total[h - 1] * (1 - rate) + coming[h - 1]
    share = seen.mix[o] / total[0] if total[0] else np.full(len(seen.live), np.nan)
    alone = total[0] * (1 - rate) ** np.arange(horizon + 1)
    return total[:, None] * share, alone * share[seen.live].sum()


def last_year(seen: Observed, o: int, horizon: int) -> Forecast:
    """A year before."""
    ahead = np.arange(1, horizon + 1)
    before = o + ahead - seen.cycle * -(-ahead // seen.cycle)
    base = np.full((horizon + 1, len(seen.live)), np.nan)
    alone = np.full(horizon + 1, np.nan)
    base[0], alone[0] = seen.mix[o], seen.all_live[o]
    then = o - seen.cycle
    if seen.cycle > 1:
        base[1:][before >= 0] = seen.mix[before[before >= 0]]
    if seen.cycle > 1 and then >= 0 and seen.mix[then].sum() > 0:
        steps = ahead[ahead <= seen.cycle]
        alone[steps] = seen.mix[o].sum() * seen.of_origin(then)[steps] / seen.mix[then].sum()
    return base, alone


def cohort_curve(seen: Observed, o: int, horizon: int) -> Forecast:
    """Each age keeps what it kept in earlier cohorts."""
    known = seen.ages[: o + 1]
    keep = _retention_by_age(known)
    whole = seen.all_live[: o + 1]
    rest = whole - known.sum(axis=1)
    keep_rest = rest[1:].sum() / rest[:-1].sum() if rest[:-1].sum() > 0 else keep[-1]
    coming = simple_joiners(seen, o, horizon) @ seen.live
    old, fresh, others = known[o].copy(), np.zeros(0), rest[o]
    alone, base = [whole[o]], [whole[o]]
    for h in range(horizon):
        old = _aged(old, keep)
        fresh = np.r_[coming[h], _aged(fresh, keep)[1:]] if len(fresh) else np.r_[coming[h]]
        others = others * min(keep_rest, 1.0)
        alone.append(old.sum() + others)
        base.append(alone[-1] + fresh.sum())
    share = seen.mix[o] / whole[o] if whole[o] else np.full(len(seen.live), np.nan)
    return np.array(base)[:, None] * share, np.array(alone)


RIVALS: dict[str, Callable[[Observed, int, int], Forecast]] = {
    "last_mix": last_mix,
    "constant_churn": constant_churn,
    "last_year": last_year,
    "cohort_curve": cohort_curve,
}


def _aged(counts: Array, keep: Array) -> Array:
    """Counts by age one period later (age 0 empty)."""
    return np.r_[0.0, counts * keep[np.minimum(np.arange(len(counts)), len(keep) - 1)]]


def _retention_by_age(known: Array) -> Array:
    """(A,) live at age a + 1 over live at age a, one period later, over all periods; older ages help thin ones.

    >>> _retention_by_age(np.array([[100.0, 0, 0], [0, 60, 0], [0, 0, 45]])).tolist()
    [0.6, 0.75, 0.75]
    """
    then, later = known[:-1].sum(axis=0), np.zeros(known.shape[1])
    later[:-1] = known[1:, 1:].sum(axis=0)
    then[-1] = 0.0
    keep = np.ones(known.shape[1])
    tail = 1.0
    for a in range(len(keep) - 1, -1, -1):
        older = then[a:].sum()
        tail = later[a:].sum() / older if older > 0 else tail
        keep[a] = later[a] / then[a] if then[a] >= AGED else tail
    oldest = np.flatnonzero(then >= AGED)
    if len(oldest):
        keep[oldest[-1] + 1 :] = np.where(
            then[oldest[-1] + 1 :] > 0, keep[oldest[-1] + 1 :], keep[oldest[-1]]
        )
    return np.minimum(keep, 1.0)


def simple_joiners(seen: Observed, o: int, horizon: int) -> Array:
    """(H, K) joiners after period o: the same period a year before, else the mean since then; none: 0."""
    past = np.nan_to_num(seen.joiners[: o + 1])
    if seen.cycle > 1 and o + 1 - seen.cycle >= 1:
        return past[o + 1 - seen.cycle + np.arange(horizon) % seen.cycle]
    return np.tile(past[1:].mean(axis=0) if o else np.zeros(past.shape[1]), (horizon, 1))


@dataclass(frozen=True, eq=False)
class RivalForecasts:
    """Point forecasts of one rival at every origin, and the bands that its past errors make.

    base : (T, H+1, K) counts by state;  alone : (T, H+1) live customers of the origin
    """

    seen: Observed
    base: Array
    alone: Array

    @classmethod
    def of(cls, name: str, seen: Observed, horizon: int) -> RivalForecasts:
        periods, size = seen.mix.shape
        base = np.full((periods, horizon + 1, size), np.nan)
        alone = np.full((periods, horizon + 1), np.nan)
        for o in range(STARTED, periods):
            base[o], alone[o] = RIVALS[name](seen, o, horizon)
        return cls(seen, base, alone)

    def of_quantity(self, weight: Array | None) -> tuple[Array, Array]:
        """(T, H+1) forecasts, and what happened (NaN beyond the window); None: live of the origin."""
        horizon = self.alone.shape[1] - 1
        if weight is None:
            return self.alone, self.seen.kept[:, : horizon + 1].sum(axis=2)
        value = self.seen.mix @ weight
        actual = np.full(self.alone.shape, np.nan)
        for h in range(horizon + 1):
            actual[: len(value) - h, h] = value[h:]
        return self.base @ weight, actual

    def band(self, weight: Array | None, o: int, h: int, level: float) -> tuple[float, float, float, float]:
        """(forecast, root mean square error, low, high) of horizon h from origin o; NaN with few errors."""
        forecast, actual = self.of_quantity(weight)
        error = (actual - forecast)[: max(o - h + 1, 0), h]
        error = error[~np.isnan(error)]
        point = float(forecast[o, h])
        if len(error) < FEWEST_ERRORS or np.isnan(point):
            return point, np.nan, np.nan, np.nan
        spread = float(np.sqrt((error**2).mean()))
        reach = float(stdtrit(len(error) - 1, (1 + level) / 2)) * spread
        return point, spread, max(point - reach, 0.0), point + reach
