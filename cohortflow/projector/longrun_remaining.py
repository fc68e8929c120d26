"""The mix of those who have not left, and the share of them that is kept, in the long run.

The right mix of one component keeps itself, u Q = lambda u. Of several kinds of customers the one that keeps
the most is all that remains in the end; with seasons there is one mix for each place of the cycle, and the
retention is the average over it, lambda^(1/length) of the cycle's product.
Source: Darroch & Seneta (1965) J. Appl. Prob. 2, 88.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from cohortflow.chain import Component
from cohortflow.errors import NotIdentified
from cohortflow.markov.quasi_stationary import Remaining, remaining, remaining_from
from cohortflow.markov.structure import leads_to
from cohortflow.projector.accept import Array
from cohortflow.projector.mix import filled
from cohortflow.projector.prospect import LONGEST, SAME, SETTLED, Figure, Prospect


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


def remaining_figures(at: Prospect) -> Iterator[Figure]:
    """remaining_retention, remaining_mix, and how soon the mix of those remaining settles."""
    if at.chain.undefined()[~at.schedule.states.exit_mask].all():
        yield Figure("remaining_retention", "", "", math.nan, "rows_without_data")
        return
    found = [(c, r) for c, r in enumerate(rings(at)) if _peopled(at, c)]
    top = max(r.retention for _, r in found)
    leading = [(c, r) for c, r in found if r.retention >= top * (1 - SAME)]
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
