"""The base that constant joiners keep up in the end: m = m P + r, r joining each period.

Source: Bartholomew (1982), Stochastic Models for Social Processes, ch. 3.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from cohortflow.markov.elimination import eliminate
from cohortflow.projector.accept import Array
from cohortflow.projector.prospect import Figure, Prospect
from cohortflow.states import ALL_LIVE


def settled_figures(at: Prospect, joiners: Array) -> Iterator[Figure]:
    """settled_base and settled_mix; "grows_without_limit" where joiners can get to a place nobody leaves."""
    states = at.schedule.states
    if (at.chain.undefined(joining=True) & (joiners > 0)).any():
        yield Figure("settled_base", ALL_LIVE, "", math.nan, "rows_without_data")
        return
    entering = _entering(at, joiners)
    inside = np.asarray(at.chain.inside)
    reached = np.asarray(at.structure.reachable[entering > 0].any(axis=0))
    if any(reached[list(group)].any() for group, _ in at.groups):
        yield Figure("settled_base", ALL_LIVE, "", math.nan, "grows_without_limit")
        return
    used = np.flatnonzero(inside & reached)
    base = np.zeros(len(inside))
    if len(used):
        leaving = np.delete(at.chain.P[used], used, axis=1).sum(axis=1)
        base[used] = entering[used] @ eliminate(at.chain.P[np.ix_(used, used)], leaving).inverse()
    turns = at.cycle
    for place in range(turns):
        here = _at_place(at, base, place)
        note = at.position(place) if turns > 1 else ""
        for name in states.remaining:
            yield Figure("settled_base", name, "", float(here[states.index(name)]), note)
        yield Figure("settled_base", ALL_LIVE, "", float(here[states.live_mask].sum()), note)
        total = here[~states.exit_mask].sum()
        for name in states.remaining:
            share = float(here[states.index(name)] / total) if total > 0 else math.nan
            yield Figure("settled_mix", name, "", share, note)


def _entering(at: Prospect, joiners: Array) -> Array:
    """(S,) joiners a period, entering every place of a cycle and the last place of a held sequence."""
    out = np.zeros(len(at.chain.report))
    for number, part in enumerate(at.schedule.components):
        own = at.chain.component == number
        places = np.unique(at.chain.place[own])
        for place in places if part.tail == "cycle" else places[-1:]:
            out[own & (at.chain.place == place)] = joiners @ part.join
    return out


def _at_place(at: Prospect, base: Array, place: int) -> Array:
    """(K,) the settled base at one place of the common cycle."""
    here = np.zeros(len(base), dtype=bool)
    for number, part in enumerate(at.schedule.components):
        own = at.chain.component == number
        if part.tail == "cycle":
            here |= own & (at.chain.place == place % len(part.matrices))
        else:
            here |= own & (at.chain.place == at.chain.place[own].max())
    return at.fold(np.where(here, base, 0.0))
