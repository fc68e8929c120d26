"""The figures of the long run, from the chain that a Schedule follows for ever.

A held sequence ends in its last matrix; a cycle comes round, and then each of its places has a mix of its own
(a long-run mix for every month). Figures are rows (measure, state, from, value, note): codes, full precision.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from cohortflow.chain import Component, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.quasi_stationary import Remaining, remaining, remaining_from
from cohortflow.markov.stationary import cycle_limits, stationary_laws, time_average_matrix
from cohortflow.markov.structure import Structure, analyse, leads_to
from cohortflow.projector.accept import Array
from cohortflow.projector.mix import filled
from cohortflow.projector.unroll import Unrolled, unroll
from cohortflow.states import ALL_LIVE

SETTLED = 0.01
LONGEST = 20_000
_SAME = 1e-12


@dataclass(frozen=True)
class Figure:
    """One row: `origin` is the table's column `from`."""

    measure: str
    state: str
    origin: str
    value: float
    note: str = ""

    @property
    def key(self) -> tuple[str, str, str, str]:
        return self.measure, self.state, self.origin, self.note


@dataclass(frozen=True, eq=False)
class Prospect:
    """A Schedule seen from a base period: what it leads to.

    starts : name -> (K,) law of the state now;  joiners : (K,) a period, or None
    position : label of the place k steps on ("" when the model has no cycle)
    """

    schedule: Schedule
    starts: Mapping[str, Array]
    joiners: Array | None
    first_step: int
    position: Callable[[int], str]

    @cached_property
    def chain(self) -> Unrolled:
        return unroll(self.schedule, first_step=self.first_step)

    @cached_property
    def structure(self) -> Structure:
        return analyse(self.chain.P)

    @cached_property
    def cycle(self) -> int:
        """Length of the season's cycle, 1 when there is none."""
        return math.lcm(*(len(c.matrices) for c in self.schedule.components if c.tail == "cycle"))

    @cached_property
    def groups(self) -> list[tuple[tuple[int, ...], int]]:
        """Closed groups other than exits that somebody can get to, with their period beyond the season's."""
        begun = self._begun
        return [
            (group, max(1, period // self._length(group[0])))
            for group, period in zip(self.structure.closed, self.structure.periods, strict=True)
            if begun[list(group)].any() and group[0] not in self.chain.exits
        ]

    @cached_property
    def exits_reached(self) -> bool:
        """Whether any exit can be taken."""
        return bool(self._begun[list(self.chain.exits)].any())

    @cached_property
    def verdict(self) -> str:
        """exits_only | unique_limit | unique_cycle | depends_on_start | no_limit | not_identified.

        Of the starts that cannot reach a row without data; not_identified when there are none.
        """
        if not self._begun.any():
            return "not_identified"
        if not self.groups:
            return "exits_only"
        if any(period > 1 for _, period in self.groups):
            return "no_limit"
        if len(self.groups) > 1 or self.exits_reached:
            return "depends_on_start"
        return "unique_cycle" if self._length(self.groups[0][0][0]) > 1 else "unique_limit"

    @cached_property
    def _begun(self) -> Array:
        """(S,) what can be reached from a state that is not an exit, rows without data being out of reach."""
        inside = ~self.schedule.states.exit_mask
        laws = (self.chain.start[inside].sum(axis=0) + self.chain.join[inside].sum(axis=0)) > 0
        laws &= ~self.chain.clouded
        return self.structure.reachable[laws].any(axis=0)

    def _length(self, state: int) -> int:
        part = self.schedule.components[int(self.chain.component[state])]
        return len(part.matrices) if part.tail == "cycle" else 1

    def fold(self, values: Array) -> Array:
        """(S,) to (K,)."""
        out = np.zeros(len(self.schedule.states))
        np.add.at(out, self.chain.report, values)
        return out

    def clouded(self, law: Array) -> bool:
        """Whether this start can reach a row without data."""
        return bool(self.chain.undefined()[law > 0].any())


def figures(prospect: Prospect) -> Iterator[Figure]:
    """Every figure of the contract's table `long_run` that this chain has."""
    yield from _groups(prospect)
    yield from _from_starts(prospect)
    if prospect.schedule.states.exits:
        yield from _remaining(prospect)
    if prospect.joiners is not None:
        yield from _settled(prospect)


# ---- closed groups ----
def _groups(at: Prospect) -> Iterator[Figure]:
    names = at.schedule.states.names
    laws = stationary_laws(at.chain.P)
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
    length = at._length(group[0])
    for place in range(length):
        here = at.fold(np.where(at.chain.place == place, law, 0.0)) if length > 1 else at.fold(law)
        label = at.position(place) if length > 1 else ""
        for member in members:
            yield Figure("stationary_share", names[member], origin, float(here[member] / here.sum()), label)
    for member in members:
        yield Figure("return_time", names[member], names[member], 1.0 / float(at.fold(law)[member]))


# ---- limits from a start ----
def _from_starts(at: Prospect) -> Iterator[Figure]:
    averages = time_average_matrix(at.chain.P)
    for origin, law in at.starts.items():
        if at.clouded(law):
            yield Figure("limit_from_start", "", origin, math.nan, "rows_without_data")
            continue
        begin = law @ at.chain.start
        laws = np.array([at.fold(x) for x in cycle_limits(at.chain.P, begin)])
        yield from _limits(at, origin, laws)
        if len(laws) > 1 and np.abs(laws - laws[0]).max() > _SAME:
            yield from _shares(at, "time_average", origin, at.fold(begin @ averages), "")
        if at.verdict != "exits_only":
            yield Figure("periods_to_settle", "", origin, _settles(at, begin, laws))


def _limits(at: Prospect, origin: str, laws: Array) -> Iterator[Figure]:
    if np.abs(laws - laws[0]).max() <= _SAME:
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


# ---- those who remain ----
@dataclass(frozen=True, eq=False)
class Ring:
    """One component's matrices for ever (one, or a cycle from the first step on), inside the exits only."""

    component: Component
    matrices: list[Array]
    product: Array
    kept: Remaining

    @property
    def retention(self) -> float:
        """Share kept a period in the end (the average over a cycle)."""
        return float(self.kept.retention ** (1.0 / len(self.matrices)))


def rings(at: Prospect) -> list[Ring]:
    """One Ring a component; states that can reach a row without data are taken out (their rows are 0)."""
    out = []
    for number, part in enumerate(at.schedule.components):
        inside = np.flatnonzero(~at.schedule.states.exit_mask[part.report])
        turns = len(part.matrices) if part.tail == "cycle" else 1
        begin = at.first_step if part.tail == "cycle" else max(at.first_step, len(part.matrices) - 1)
        own = at.chain.component == number
        last = int(at.chain.place[own].max()) - turns + 1
        matrices = []
        for k in range(turns):
            unclear = at.chain.clouded[own & (at.chain.place == last + k)][inside]
            matrix = filled(part.matrix(begin + k))[np.ix_(inside, inside)]
            matrices.append(np.where(unclear[:, None], 0.0, matrix))
        product = matrices[0] if turns == 1 else np.linalg.multi_dot([*matrices, np.eye(len(inside))])
        out.append(Ring(part, matrices, product, remaining(product)))
    return out


def _remaining(at: Prospect) -> Iterator[Figure]:
    if at.chain.undefined()[~at.schedule.states.exit_mask].all():
        yield Figure("remaining_retention", "", "", math.nan, "rows_without_data")
        return
    found = [(c, r) for c, r in enumerate(rings(at)) if _peopled(at, c)]
    top = max(r.retention for _, r in found)
    leading = [(c, r) for c, r in found if r.retention >= top * (1 - _SAME)]
    code = leading[0][1].kept.code if len(leading) == 1 else "depends_on_start"
    note = f"component:{leading[0][1].component.name}" if len(found) > 1 and len(leading) == 1 else code
    yield Figure("remaining_retention", "", "", top, note)
    if len(leading) > 1:
        yield Figure("remaining_mix", "", "", math.nan, code)
    elif code in ("exists", "some_starts", "periodic"):
        yield from _ring_mix(at, leading[0][1], leading[0][1].kept.mix, "", note)
        if code != "periodic":
            yield from _settling(at, leading[0][1], note)
    elif code == "depends_on_start" and len(at.schedule.components) == 1:
        yield from _mix_by_start(at, leading[0][1])
    else:
        yield Figure("remaining_mix", "", "", math.nan, code)


def _peopled(at: Prospect, component: int) -> bool:
    laws = np.array(list(at.starts.values())) @ at.chain.start
    return bool((laws[:, at.chain.component == component] > 0).any())


def _ring_mix(at: Prospect, ring: Ring, mix: Array, origin: str, note: str) -> Iterator[Figure]:
    """The mix at each place of the cycle, folded to declared states."""
    states = at.schedule.states
    inside = np.flatnonzero(~states.exit_mask[ring.component.report])
    for place, matrix in enumerate(ring.matrices):
        folded = np.zeros(len(states))
        np.add.at(folded, ring.component.report[inside], mix)
        label = f"{note} {at.position(place)}" if len(ring.matrices) > 1 else note
        for name in states.remaining:
            yield Figure("remaining_mix", name, origin, float(folded[states.index(name)]), label)
        mix = mix @ matrix
        mix = mix / mix.sum()


def _mix_by_start(at: Prospect, ring: Ring) -> Iterator[Figure]:
    inside = ~at.schedule.states.exit_mask[ring.component.report]
    for origin, law in at.starts.items():
        begin = (law @ ring.component.start)[inside]
        try:
            mix = remaining_from(ring.product, begin / begin.sum())
        except NotIdentified:
            yield Figure("remaining_mix", "", origin, math.nan, "no_limit")
            continue
        yield from _ring_mix(at, ring, mix, origin, "depends_on_start")


def _settling(at: Prospect, ring: Ring, note: str) -> Iterator[Figure]:
    """periods_to_settle of the mix of those remaining, where everybody leaves in the end."""
    if at.verdict != "exits_only" or len(ring.matrices) > 1 or len(at.schedule.components) > 1:
        return
    inside = ~at.schedule.states.exit_mask[ring.component.report]
    for origin, law in at.starts.items():
        x = (law @ ring.component.start)[inside]
        if not leads_to(ring.product > 0, ring.kept.dominant)[x > 0].any():
            continue
        yield Figure("periods_to_settle", "", origin, _until_mix(ring, x / x.sum()), "of_remaining")


def _until_mix(ring: Ring, x: Array) -> float:
    since = 0
    for step in range(LONGEST):
        if 0.5 * np.abs(x - ring.kept.mix).sum() > SETTLED:
            since = step + 1
        elif step - since >= 24:
            return float(since)
        x = x @ ring.product
        x = x / x.sum()
    return math.inf


# ---- the settled base ----
def _settled(at: Prospect) -> Iterator[Figure]:
    states = at.schedule.states
    assert at.joiners is not None
    if at.chain.undefined(joining=True)[at.joiners > 0].any():
        yield Figure("settled_base", ALL_LIVE, "", math.nan, "rows_without_data")
        return
    entering = _entering(at)
    inside = at.chain.inside
    reached = at.structure.reachable[entering > 0].any(axis=0)
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


def _entering(at: Prospect) -> Array:
    """(S,) joiners a period, entering every place of a cycle and the last place of a held sequence."""
    out = np.zeros(len(at.chain.report))
    for number, part in enumerate(at.schedule.components):
        own = at.chain.component == number
        places = np.unique(at.chain.place[own])
        for place in places if part.tail == "cycle" else places[-1:]:
            out[own & (at.chain.place == place)] = at.joiners @ part.join
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
