r"""The bridge from the last forecast to this one: what each group of differences contributes.

    last forecast + data_restated + opening_mix + segment_mix + joiners + rates + model + value + adjustments
        = this forecast

Data restated comes first, as finance restates comparatives: the earlier forecast made again, as it was, on what
is now counted for its periods, less what it said. The others are Shapley values: the mean, over all orders in
which the groups could be changed from the one forecast to the other, of the change that each makes at its turn,

    part_g = sum over S without g of |S|! (G-|S|-1)! / G!  [F(S + g) - F(S)],

F the forecast with the groups in S taken from the later run. No order is preferred, and the parts add up. Within
a group the change at each turn is split further: exactly where it is linear (opening by state, joiners by
kind), for rates by move as in course.py. Sources: Shapley (1953), A value for n-person games; Aumann & Shapley
(1974).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations
from math import factorial
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import InputError, NotIdentified
from cohortflow.runs.drivers import (
    ADJUSTED,
    CONTRIBUTION,
    JOINERS,
    MODEL,
    OPENING,
    RATES,
    SEGMENTS,
    VALUE,
    Drivers,
    Item,
)
from cohortflow.runs.opened import OpenRun

Array = NDArray[np.float64]
LAST, THIS, RESTATED = "last_forecast", "this_forecast", "data_restated"
PART_OF = {
    OPENING: "opening_mix",
    SEGMENTS: "segment_mix",
    JOINERS: "joiners",
    RATES: "rates",
    MODEL: "model",
    VALUE: "value",
    ADJUSTED: "adjustments",
}
PARTS = (RESTATED, *PART_OF.values())
REPEATS = 1e-6  # how closely a forecast must come again from its own counts, relative to 1 + its size
COLUMNS = ["quantity", "period", "part", "amount"]
DETAILS = ["quantity", "period", "part", "kind", "from", "to", "amount"]
Whole = Callable[[frozenset[str]], Any]


def shapley(players: Sequence[str], value: Whole) -> dict[str, Any]:
    """Shapley values of a game; `value` gives a number or an array for each set of players.

    >>> shapley("ab", lambda s: 10.0 * ("a" in s) + 4.0 * (s == {"a", "b"}))
    {'a': 12.0, 'b': 2.0}
    """
    return {
        player: sum(weight * (value(s | {player}) - value(s)) for s, weight in _turns(players, player))
        for player in players
    }


def _turns(players: Sequence[str], player: str) -> list[tuple[frozenset[str], float]]:
    """The sets that may stand before a player, with the share of orders in which they do."""
    others = [p for p in players if p != player]
    count = len(players)
    return [
        (frozenset(s), factorial(k) * factorial(count - k - 1) / factorial(count))
        for k in range(count)
        for s in combinations(others, k)
    ]


@dataclass(frozen=True, eq=False)
class Bridge:
    """frame : quantity, period, part, amount, from last_forecast to this_forecast, in the order of the sum

    details : quantity, period, part, kind, from, to, amount: rates by move (largest first), opening by state,
        joiners by kind; what could not be told apart has no names
    notes : codes, for instance "segment_mix_in_rates"
    """

    frame: pd.DataFrame
    details: pd.DataFrame
    notes: tuple[str, ...]


def bridge(earlier: OpenRun, later: OpenRun) -> Bridge:
    """The bridge for every period that both forecasts cover, the later base included.

    InputError when no period is common, or when a run does not come again from its own counts; NotIdentified
    when there is nothing that both know.
    """
    drivers = Drivers.of(earlier, later)
    periods = range(later.base, later.base + drivers.steps + 1)
    if drivers.steps < 0:
        end = earlier.tally.calendar.label(earlier.base + earlier.study.horizon)
        raise InputError(
            f"The forecasts have no period in common: the earlier one ends in {end}, the later one begins after "
            f"{later.label}. Compare runs that overlap."
        )
    _as_published(later)
    last = _lined_up(_as_published(earlier), earlier, drivers, periods)
    memory: dict[frozenset[str], Array] = {}

    def value(choice: frozenset[str]) -> Array:
        if choice not in memory:
            memory[choice] = drivers.outcome(choice)
        return memory[choice]

    everything = frozenset(drivers.active)
    parts = {RESTATED: value(frozenset()) - last}
    parts |= {PART_OF[group]: amount for group, amount in shapley(drivers.active, value).items()}
    for name in PARTS:
        parts.setdefault(name, np.zeros_like(last))
    if not drivers.separates_segments:
        del parts["segment_mix"]
    known = _known(earlier, later, drivers, periods)
    if not known.any():
        raise NotIdentified(
            "No period of the forecasts has a figure that both know: a state in the base has no rates yet. "
            "Compare later runs, or runs over a longer history."
        )
    tables = {LAST: last, **{name: parts[name] for name in PARTS if name in parts}, THIS: value(everything)}
    labels = [later.tally.calendar.label(p) for p in periods]
    frame = _long(tables, drivers, labels, known)
    return Bridge(frame, _details(drivers, parts, labels, known), _notes(earlier, later, drivers))


def _as_published(run: OpenRun) -> Array:
    """(H+1, Q) the run's forecast made again from its counts, held against its table."""
    own = Drivers.of(run, run)
    made = own.outcome(frozenset())
    table = run.projection.pivot(index="periods_ahead", columns="state", values="customers")
    said = table[list(own.weights)].to_numpy(dtype=float)
    off = np.abs(made[:, : said.shape[1]] - said) > REPEATS * (1 + np.abs(said))
    if said.shape[0] != len(made) or (off & ~np.isnan(said)).any():
        raise InputError(
            f'The run "{run.name}" does not come again from its own counts: its table of projections was changed, '
            f"or another version of the program ({run.record['program']['version']}) made it. Make it again."
        )
    return made


def _lined_up(first: Array, earlier: OpenRun, drivers: Drivers, periods: Sequence[int]) -> Array:
    """(n+1, Q) what the earlier run said of the periods b .. b+n, in the drivers' quantities."""
    own = Drivers.of(earlier, earlier)
    rows = first[drivers.gap : drivers.gap + len(periods)]
    out = rows[:, [own.quantities.index(name) for name in drivers.quantities]].copy()
    if drivers.has_money:
        out[0, drivers.quantities.index(CONTRIBUTION)] = 0.0
    return out


def _known(earlier: OpenRun, later: OpenRun, drivers: Drivers, periods: Sequence[int]) -> Array:
    """(n+1, Q) flags: both runs know the figure; the contribution of the period of the count is no forecast."""
    flags = np.ones((len(periods), len(drivers.quantities)), dtype=bool)
    for run in (earlier, later):
        table = run.projection.pivot(index="periods_ahead", columns="state", values="customers")
        for t, period in enumerate(periods):
            row = table.loc[period - run.base, list(drivers.weights)].to_numpy(dtype=float)
            flags[t, : len(row)] &= ~np.isnan(row)
            flags[t, len(row) :] &= not np.isnan(row).any()
    if drivers.has_money:
        flags[0, -1] = False
    return flags


def _long(tables: dict[str, Array], drivers: Drivers, labels: list[str], known: Array) -> pd.DataFrame:
    rows = [
        (quantity, period, part, float(table[t, q]))
        for q, quantity in enumerate(drivers.quantities)
        for t, period in enumerate(labels)
        if known[t, q]
        for part, table in tables.items()
    ]
    return pd.DataFrame(rows, columns=COLUMNS)


def _details(drivers: Drivers, parts: dict[str, Array], labels: list[str], known: Array) -> pd.DataFrame:
    rows: list[tuple[Any, ...]] = []
    for group in (OPENING, JOINERS, RATES):
        if group not in drivers.active:
            continue
        items = _items(drivers, group)
        rest = parts[PART_OF[group]] - sum(items.values(), np.zeros_like(parts[PART_OF[group]]))
        if not items or np.abs(rest).max() > 1e-9 * (1 + np.abs(parts[PART_OF[group]]).max()):
            items[("", "", "")] = rest
        for q, quantity in enumerate(drivers.quantities):
            for t, period in enumerate(labels):
                found = [(item, float(amount[t, q])) for item, amount in items.items()] if known[t, q] else []
                found.sort(key=lambda pair: (-abs(pair[1]), pair[0]))
                rows += [(quantity, period, PART_OF[group], *item, amount) for item, amount in found]
    return pd.DataFrame(rows, columns=DETAILS)


def _items(drivers: Drivers, group: str) -> dict[Item, Array]:
    """The parts of one group's Shapley value."""
    out: dict[Item, Array] = {}
    for choice, weight in _turns(drivers.active, group):
        for item, amount in drivers.items(group, choice).items():
            out[item] = out.get(item, 0.0) + weight * amount
    return {item: amount for item, amount in out.items() if np.any(amount)}


def _notes(earlier: OpenRun, later: OpenRun, drivers: Drivers) -> tuple[str, ...]:
    notes = [] if drivers.separates_segments else ["segment_mix_in_rates"]
    if not drivers.has_money and (earlier.study.value or later.study.value):
        notes.append("money_not_comparable")
    left = set(earlier.study.totals) ^ set(later.study.totals)
    left |= {n for n in earlier.study.totals if later.study.totals.get(n, ()) != earlier.study.totals[n]}
    return (*notes, *(f"total_not_comparable:{name}" for name in sorted(left)))
