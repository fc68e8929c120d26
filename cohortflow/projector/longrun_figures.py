"""The figures of the long run, from the chain that a Schedule follows for ever.

A held sequence ends in its last matrix; a cycle comes round, and then each of its places has a mix of its own
(a long-run mix for every month). Figures are rows (measure, state, from, value, note): codes, full precision.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from cohortflow.markov.stationary import cycle_limits, stationary_laws
from cohortflow.projector.accept import Array
from cohortflow.projector.longrun_remaining import remaining_figures
from cohortflow.projector.longrun_settled import settled_figures
from cohortflow.projector.prospect import LONGEST, SAME, SETTLED, Figure, Prospect


def figures(prospect: Prospect) -> Iterator[Figure]:
    """Every figure of the contract's table `long_run` that this chain has."""
    yield from _groups(prospect)
    yield from _from_starts(prospect)
    if prospect.schedule.states.exits:
        yield from remaining_figures(prospect)
    if prospect.joiners is not None:
        yield from settled_figures(prospect, prospect.joiners)


# ---- closed groups ----
def _groups(at: Prospect) -> Iterator[Figure]:
    names = at.schedule.states.names
    laws = stationary_laws(at.chain.P) if at.groups else np.zeros((0, len(at.chain.P)))
    for number, (group, period) in enumerate(at.groups, start=1):
        origin = f"group {number}"
        members = sorted({int(at.chain.report[s]) for s in group})
        for member in members:
            yield Figure("closed_group", names[member], origin, float(number))
        yield Figure("group_period", "", origin, float(period))
        yield from _stationary(at, group, laws[at.structure.closed.index(group)], members, origin)


def _stationary(
    at: Prospect, group: tuple[int, ...], law: Array, members: list[int], origin: str
) -> Iterator[Figure]:
    names = at.schedule.states.names
    length = at.length(group[0])
    for place in range(length):
        here = at.fold(np.where(at.chain.place == place, law, 0.0)) if length > 1 else at.fold(law)
        label = at.position(place) if length > 1 else ""
        for member in members:
            yield Figure("stationary_share", names[member], origin, float(here[member] / here.sum()), label)
    for member in members:
        yield Figure("return_time", names[member], names[member], 1.0 / float(at.fold(law)[member]))


# ---- limits from a start ----
def _from_starts(at: Prospect) -> Iterator[Figure]:
    for origin, law in at.starts.items():
        if at.clouded(law):
            yield Figure("limit_from_start", "", origin, math.nan, "rows_without_data")
        elif at.verdict == "exits_only":
            yield from _shares(at, "limit_from_start", origin, law @ at.exit_split, "")
        else:
            yield from _settling(at, origin, law @ at.chain.start)


def _settling(at: Prospect, origin: str, begin: Array) -> Iterator[Figure]:
    """Limit, time average and time to settle where somebody stays for ever."""
    laws = np.array([at.fold(x) for x in cycle_limits(at.chain.P, begin)])
    yield from _limits(at, origin, laws)
    if len(laws) > 1 and np.abs(laws - laws[0]).max() > SAME:
        yield from _shares(at, "time_average", origin, at.fold(begin @ at.time_average), "")
    yield Figure("periods_to_settle", "", origin, _settles(at, begin, laws))


def _limits(at: Prospect, origin: str, laws: Array) -> Iterator[Figure]:
    if np.abs(laws - laws[0]).max() <= SAME:
        yield from _shares(at, "limit_from_start", origin, laws.mean(axis=0), "")
    elif at.cycle % len(laws) == 0:
        for place, law in enumerate(laws):
            yield from _shares(at, "limit_from_start", origin, law, at.position(place))
    else:
        yield Figure("limit_from_start", "", origin, math.nan, "no_limit")


def _shares(at: Prospect, measure: str, origin: str, law: Array, note: str) -> Iterator[Figure]:
    for name, value in zip(at.schedule.states.names, law, strict=True):
        yield Figure(measure, name, origin, float(value), note)


def _settles(at: Prospect, begin: Array, laws: Array) -> float:
    """First period from which the mix stays within 0.01 of its limit (of its season), in total variation."""
    if at.cycle % len(laws):
        return math.inf
    x, since = begin, 0
    for step in range(LONGEST):
        if 0.5 * np.abs(at.fold(x) - laws[step % len(laws)]).sum() > SETTLED:
            since = step + 1
        elif step - since >= 2 * len(laws) + 24:
            return float(since)
        x = x @ at.chain.P
    return math.inf
