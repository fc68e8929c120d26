"""The members of the invented Hollin Weir veg box, and the true rates at which they move.

All that is true about the scheme stands in the tables below; `generate.py` turns it into the event log. Rows
are the month before, columns the month after, entries probabilities a month. A new member spends two months
on taster boxes, so `taster` is one state for the study file and two here. What acts on a rate multiplies it,
and the row is then scaled back to one (a shift of log-odds against the rest of the row):

    w_ij(t) = p_ij(kind) * exits(channel, age) * season_j(month) * exp(f_t [j is an exit] + e_ij,t) * call_ij

f (one shock a month, shared by all moves into exits) and e (one a month for each move) are stationary AR(1)
series. The switches are `seasons`, `differences` (kind, channel, age, call), `shocks`, and `growth` (of
joiners).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import pandas as pd

FIRST_MONTH = "2023-10"  # the log starts on its first day
MONTHS = 36
STATES = ("cancelled", "card_lapsed", "paused", "taster", "quiet", "weekly", "fortnightly")

NOT_YET = -1
CANCELLED, CARD_LAPSED, PAUSED, TASTER_1, TASTER_2, QUIET, WEEKLY, FORTNIGHTLY = range(8)
REPORTED = np.array([0, 1, 2, 3, 3, 4, 5, 6], dtype=np.int8)  # position in STATES of each state above

# fmt: off
#   cancelled  lapsed  paused  taster 1  taster 2   quiet  weekly  fortnightly
RESTLESS = np.array([
    [0.992,    0,      0,      0.008,    0,         0,     0,      0],      # cancelled
    [0,        0.988,  0,      0.012,    0,         0,     0,      0],      # card lapsed
    [0.060,    0,      0.600,  0,        0,         0.080, 0.120,  0.140],  # paused
    [0.060,    0,      0.010,  0,        0.930,     0,     0,      0],      # first taster month
    [0.120,    0,      0.035,  0,        0,         0.125, 0.380,  0.340],  # second taster month
    [0.070,    0.120,  0.030,  0,        0,         0.500, 0.100,  0.180],  # quiet
    [0.028,    0,      0.034,  0,        0,         0.050, 0.818,  0.070],  # weekly
    [0.038,    0,      0.034,  0,        0,         0.083, 0.060,  0.785],  # fortnightly
])
STEADY = np.array([
    [0.990,    0,      0,      0.010,    0,         0,     0,      0],      # cancelled
    [0,        0.982,  0,      0.018,    0,         0,     0,      0],      # card lapsed
    [0.010,    0,      0.540,  0,        0,         0.030, 0.250,  0.170],  # paused
    [0.020,    0,      0.005,  0,        0.975,     0,     0,      0],      # first taster month
    [0.025,    0,      0.015,  0,        0,         0.030, 0.560,  0.370],  # second taster month
    [0.020,    0.060,  0.020,  0,        0,         0.380, 0.260,  0.260],  # quiet
    [0.003,    0,      0.006,  0,        0,         0.004, 0.980,  0.007],  # weekly
    [0.004,    0,      0.007,  0,        0,         0.008, 0.008,  0.973],  # fortnightly
])
# fmt: on
TYPICAL = (RESTLESS + STEADY) / 2  # everybody, when `differences` are switched off

# Factors on the moves of a month, by the state moved to:
#            cancelled lapsed paused taster 1 2 quiet weekly fortnightly
SEASONS = {
    1: np.array([1.50, 1.30, 0.90, 1.50, 1, 1.15, 1.00, 1.00]),  # January: resolutions, and bills
    8: np.array([1.45, 1.00, 2.60, 0.80, 1, 1.50, 1.00, 1.00]),  # August: holidays
    9: np.array([0.90, 1.00, 0.60, 1.30, 1, 0.90, 1.15, 1.15]),  # September: back home
    12: np.array([0.85, 1.00, 1.30, 0.80, 1, 1.15, 1.00, 1.00]),
}
JOINER_SEASONS = {1: 1.60, 2: 1.15, 5: 1.10, 7: 0.85, 8: 0.60, 9: 1.30, 12: 0.65}
JOINER_GROWTH = 0.14  # a year
ALREADY_THERE = 0.37  # share of all members who were there before the log began
FIRST_MIX = {PAUSED: 0.06, WEEKLY: 0.57, FORTNIGHTLY: 0.37}  # their states in the first month; none quiet

STEADY_SHARE = {"already there": 0.48, "joiners": 0.27}
# share of members, factor on their moves into exits
CHANNELS = {"web": (0.50, 1.00), "market": (0.30, 1.30), "friend": (0.20, 0.70)}
AGES = {"18-34": (0.30, 1.20), "35-54": (0.45, 1.00), "55+": (0.25, 0.85)}

TRIAL_START = 24  # October 2025: all members then on the books are drawn into one of two arms
ARMS = ("usual", "call")
CALL_FACTOR = 1.45  # "call": a phone call to quiet members multiplies their moves to weekly and fortnightly

SHARED_SHOCK_SD, CELL_SHOCK_SD, JOINER_SHOCK_SD, SHOCK_MEMORY = 0.16, 0.07, 0.08, 0.6


class StateHistory(NamedTuple):
    """One entry for each member and month seen: customer, month since FIRST_MONTH, position in STATES."""

    customer: np.ndarray
    period: np.ndarray
    state: np.ndarray


@dataclass(frozen=True)
class Members:
    """What is fixed about n members, and the (n, months) array of their states (NOT_YET before they join)."""

    joined: np.ndarray  # month of joining, NOT_YET = before the log began
    steady: np.ndarray
    channel: np.ndarray
    age: np.ndarray
    arm: np.ndarray  # position in ARMS; NOT_YET = not in the trial
    walk: np.ndarray


def state_history(
    members: int,
    months: int = MONTHS,
    *,
    seed: int,
    shock_seed: int | None = None,
    first_customer: int = 0,
    shocks: bool = True,
    differences: bool = True,
    seasons: bool = True,
    growth: bool = True,
    hold_exits: bool = False,
) -> StateHistory:
    """Labelled monthly states without events, about half a second per 100,000 members.

    An exit is written once, in the month it happens (every month with `hold_exits`). Large populations are
    made in pieces: give each its own `seed` and `first_customer`, and all the same `shock_seed`.
    """
    switches = {"shocks": shocks, "differences": differences, "seasons": seasons, "growth": growth}
    walk = draw_members(members, months, seed=seed, shock_seed=shock_seed, **switches).walk
    seen = walk != NOT_YET
    if not hold_exits:
        seen[:, 1:] &= (walk[:, 1:] > CARD_LAPSED) | (walk[:, :-1] > CARD_LAPSED)
    customer, period = np.nonzero(seen)
    return StateHistory(customer + first_customer, period.astype(np.int16), REPORTED[walk[seen]])


def draw_members(
    members: int,
    months: int = MONTHS,
    *,
    seed: int,
    shock_seed: int | None = None,
    shocks: bool = True,
    differences: bool = True,
    seasons: bool = True,
    growth: bool = True,
) -> Members:
    """Members and the states they pass through; a switch leaves the other random streams as they are."""
    rng = np.random.default_rng([seed, 1])
    shock_rng = np.random.default_rng([seed if shock_seed is None else shock_seed, 2])
    shared, cells, joining = _shocks(months, shock_rng, scale=float(shocks))
    weights = _joiner_weights(months, seasons, growth) * np.exp(joining)
    there = round(members * ALREADY_THERE)
    counts = rng.multinomial(members - there, weights / weights.sum())
    joined = np.repeat(np.arange(-1, months), [there, *counts])
    share = np.where(joined < 0, STEADY_SHARE["already there"], STEADY_SHARE["joiners"])
    steady = (rng.random(members) < share).astype(np.int8)
    channel, age = (_choose(table, members, rng) for table in (CHANNELS, AGES))
    arm = rng.integers(0, len(ARMS), members, dtype=np.int8)
    rates = _rates(months, differences, seasons, shared, cells)
    walk, enrolled = _walk(joined, _group(steady, channel, age), arm, rates, rng)
    return Members(joined, steady, channel, age, np.where(enrolled, arm, NOT_YET), walk)


def transition_truth(
    months: int = MONTHS,
    *,
    differences: bool = False,
    seasons: bool = True,
    growth: bool = True,
    warm_up: int = 2,
) -> pd.DataFrame:
    """Exact pooled rates over the window without shocks: expected moves over expected members at risk.

    Rows and columns are STATES; the expected states of those already there and of joiners are carried forward
    month by month and group by group. Moves of members of unknown history count from origin month `warm_up`
    on. Without differences and seasons all rows but `taster` (two months long) are those of TYPICAL. A row
    that nobody could be at risk in is NaN.
    """
    rates = _rates(months, differences, seasons, *_shocks(months, np.random.default_rng(0), scale=0.0)[:2])
    weights = _joiner_weights(months, seasons, growth)
    joiners = (1 - ALREADY_THERE) * weights / weights.sum()
    mix = np.zeros(8)
    mix[list(FIRST_MIX)] = list(FIRST_MIX.values())
    old = ALREADY_THERE * _group_shares("already there")[:, None] * mix
    new = joiners[0] * _group_shares("joiners")[:, None] * (np.arange(8) == TASTER_1)
    moves = np.zeros((8, 8))
    for t in range(1, months):
        if t == TRIAL_START:
            old, new = _enrol(old), _enrol(new)
        counted = new + old * (t > warm_up)
        moves += np.einsum("gi,gij->ij", counted, rates[t])
        old, new = (np.einsum("gi,gij->gj", mass, rates[t]) for mass in (old, new))
        new[:, TASTER_1] += joiners[t] * _group_shares("joiners")
    pooled = np.zeros((7, 7))
    np.add.at(pooled, (REPORTED[:, None], REPORTED[None, :]), moves)
    with np.errstate(invalid="ignore"):
        rows = pooled / pooled.sum(axis=1, keepdims=True)
    return pd.DataFrame(rows, index=list(STATES), columns=list(STATES))


def calendar_month(period: int) -> int:
    """1 to 12 of the month that lies `period` months after FIRST_MONTH."""
    return (int(FIRST_MONTH[5:]) - 1 + period) % 12 + 1


def _shocks(
    months: int, rng: np.random.Generator, *, scale: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Shared exit shock (months,), one for each move (months, 8, 8), and the joiners' (months,)."""
    white = rng.standard_normal((months, 66))
    series = np.empty_like(white)
    series[0] = white[0]
    for t in range(1, months):
        series[t] = SHOCK_MEMORY * series[t - 1] + np.sqrt(1 - SHOCK_MEMORY**2) * white[t]
    series *= scale
    cells = series[:, 2:].reshape(months, 8, 8)
    return SHARED_SHOCK_SD * series[:, 0], CELL_SHOCK_SD * cells, JOINER_SHOCK_SD * series[:, 1]


def _joiner_weights(months: int, seasons: bool, growth: bool) -> np.ndarray:
    season = [JOINER_SEASONS.get(calendar_month(t), 1.0) if seasons else 1.0 for t in range(months)]
    growing: np.ndarray = (1 + JOINER_GROWTH * growth) ** (np.arange(months) / 12)
    return np.array(season) * growing


def _choose(table: dict[str, tuple[float, float]], n: int, rng: np.random.Generator) -> np.ndarray:
    return rng.choice(len(table), size=n, p=[share for share, _ in table.values()]).astype(np.int8)


def _group(steady: np.ndarray, channel: np.ndarray, age: np.ndarray) -> np.ndarray:
    """Number of the group that shares rates: 18 of them, and 18 more for those who get a call."""
    return (steady * len(CHANNELS) + channel) * len(AGES) + age


def _group_shares(origin: str) -> np.ndarray:
    """Expected share of each of the 36 groups among joiners or those already there, before the trial."""
    steady = STEADY_SHARE[origin]
    shares = [
        kind * channel * age
        for kind in (1 - steady, steady)
        for channel, _ in CHANNELS.values()
        for age, _ in AGES.values()
    ]
    return np.concatenate([shares, np.zeros(len(shares))])


def _enrol(mass: np.ndarray) -> np.ndarray:
    """Half of all who are on the books move from the 18 groups without a call to those with one."""
    moved = mass.copy()
    moved[18:, PAUSED:] = moved[:18, PAUSED:] = mass[:18, PAUSED:] / 2
    return moved


def _rates(
    months: int, differences: bool, seasons: bool, shared: np.ndarray, cells: np.ndarray
) -> np.ndarray:
    """Rates of each month, group and move: (months, 36, 8, 8). Entry t governs the move from t-1 to t."""
    exits = np.arange(8) <= CARD_LAPSED
    factors = np.ones((months, 36, 8, 8))
    if differences:
        by_group = [channel * age for _, channel in CHANNELS.values() for _, age in AGES.values()]
        factors *= np.where(exits, np.tile(by_group, 4)[:, None], 1.0)[:, None, :]
        factors[TRIAL_START:, 18:, QUIET, WEEKLY:] *= CALL_FACTOR
    if seasons:
        season = [SEASONS.get(calendar_month(t), np.ones(8)) for t in range(months)]
        factors *= np.array(season)[:, None, None, :]
    factors *= np.exp(cells + shared[:, None, None] * exits)[:, None, :, :]
    factors[..., exits, :] = np.where(exits, 1.0, factors[..., exits, :])  # staying away is no exit
    base = np.repeat([RESTLESS, STEADY] if differences else [TYPICAL, TYPICAL], 9, axis=0)
    rates: np.ndarray = np.tile(base, (2, 1, 1)) * factors
    return rates / rates.sum(axis=-1, keepdims=True)


def _walk(
    joined: np.ndarray, group: np.ndarray, arm: np.ndarray, rates: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """States month by month, and who is on the books when the trial starts."""
    months = len(rates)
    walk = np.full((len(joined), months), NOT_YET, dtype=np.int8)
    old = joined < 0
    walk[old, 0] = rng.choice(list(FIRST_MIX), size=int(old.sum()), p=list(FIRST_MIX.values()))
    walk[joined == 0, 0] = TASTER_1
    enrolled = np.zeros(len(joined), dtype=bool)
    upper = rates.cumsum(axis=-1)
    for t in range(1, months):
        there = np.flatnonzero(joined < t)
        before = walk[there, t - 1]
        if t == TRIAL_START:
            enrolled[there] = before >= PAUSED
        called = enrolled & (arm == ARMS.index("call"))
        limits = upper[t][(group + 18 * called)[there], before]
        walk[there, t] = (rng.random(len(there))[:, None] >= limits[:, :-1]).sum(axis=1)
        walk[joined == t, t] = TASTER_1
    return walk, enrolled
