"""A Schedule as one ordinary chain: every (component, place in sequence, expanded state) is a state of it.

A held sequence walks through its matrices and stays with the last; a cycle comes back to the first. Exits are
absorbing wherever they are entered. All mathematics of `markov/` then applies to every model, seasonal,
tenured or mixed, and what it says is folded back to the declared states.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from cohortflow.chain import Draws, Schedule
from cohortflow.markov.structure import leads_to
from cohortflow.projector.accept import Array, Flags
from cohortflow.projector.mix import filled


@dataclass(frozen=True, eq=False)
class Unrolled:
    """S states in blocks of one (component, place) each.

    P : (S, S), a row without data replaced by staying;  report : (S,) position of the declared state
    start, join : (K, S) law of a customer now in, or newly in, a declared state
    component, place : (S,) which component, and how many steps on (for a cycle: modulo its length)
    clouded : (S,) flags, can reach a row without data
    """

    P: Array
    report: Array
    start: Array
    join: Array
    component: Array
    place: Array
    clouded: Flags
    exits: tuple[int, ...]

    @property
    def inside(self) -> Flags:
        """(S,) not an exit."""
        mask = np.ones(len(self.report), dtype=bool)
        mask[list(self.exits)] = False
        return mask

    def undefined(self, *, joining: bool = False) -> Flags:
        """(K,) declared states from which a row without data can be reached."""
        laws = self.join if joining else self.start
        return np.asarray((laws > 0) @ self.clouded, dtype=bool)


def unroll(schedule: Schedule, *, first_step: int = 0) -> Unrolled:
    """The chain that the Schedule follows from step `first_step` on.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> unroll(Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]]).schedule).P[0]
    array([0. , 0.8, 0.2])
    """
    stacks = [c.matrices for c in schedule.components]
    P = _assembled(schedule, [filled(m) for m in stacks], first_step)
    missing = [np.isnan(m).any(axis=-1) for m in stacks]
    report, component, place, unknown = [], [], [], []
    for number, part in enumerate(schedule.components):
        for at, position in enumerate(_positions(schedule, number, first_step)):
            report.append(part.report)
            component.append(np.full(len(part.report), number))
            place.append(np.full(len(part.report), at))
            unknown.append(missing[number][position])
    declared = np.concatenate(report)
    lost = np.flatnonzero(np.concatenate(unknown)).tolist()
    return Unrolled(
        P=P,
        report=declared,
        start=_opened(schedule, [c.start for c in schedule.components], first_step),
        join=_opened(schedule, [c.join for c in schedule.components], first_step),
        component=np.concatenate(component),
        place=np.concatenate(place),
        clouded=leads_to(P, lost) if lost else np.zeros(len(P), dtype=bool),
        exits=tuple(np.flatnonzero(schedule.states.exit_mask[declared]).tolist()),
    )


def drawn_schedule(draws: Draws, number: int) -> Schedule:
    """One draw as a Schedule of its own; rows are divided by their sum, so that rounding does not count."""
    parts = []
    for c, part in enumerate(draws.schedule.components):
        matrices = np.asarray(draws.matrices[c][number])
        start, join = (
            np.asarray(side[c][min(number, len(side[c]) - 1)]) for side in (draws.start, draws.join)
        )
        matrices = matrices / matrices.sum(axis=-1, keepdims=True)
        parts.append(replace(part, matrices=matrices, start=start, join=join))
    return replace(draws.schedule, components=tuple(parts))


def _positions(schedule: Schedule, component: int, first_step: int) -> list[int]:
    """Which matrices of a component act from `first_step` on; the last leads to itself (hold) or back."""
    part = schedule.components[component]
    length = len(part.matrices)
    if part.tail == "cycle":
        return [(first_step + k) % length for k in range(length)]
    return list(range(min(max(first_step, 0), length - 1), length))


def _assembled(schedule: Schedule, stacks: list[Array], first_step: int) -> Array:
    """(..., S, S) from one (..., L, m, m) stack a component."""
    places = [_positions(schedule, c, first_step) for c in range(len(stacks))]
    widths = [s.shape[-1] for s in stacks]
    size = sum(len(p) * w for p, w in zip(places, widths, strict=True))
    out = np.zeros((*stacks[0].shape[:-3], size, size))
    offset = 0
    for part, stack, positions, m in zip(schedule.components, stacks, places, widths, strict=True):
        gone = schedule.states.exit_mask[part.report]
        for k, position in enumerate(positions):
            last = k + 1 == len(positions)
            onward = (0 if part.tail == "cycle" else k) if last else k + 1
            rows = offset + k * m + np.arange(m)
            block = np.where(gone[:, None], 0.0, stack[..., position, :, :])
            out[..., rows[:, None], offset + onward * m + np.arange(m)] = block
            out[..., rows[gone], rows[gone]] = 1.0
        offset += len(positions) * m
    return out


def _opened(schedule: Schedule, laws: list[Array], first_step: int) -> Array:
    """(..., K, S): the laws in the first block of each component."""
    blocks = []
    for number, law in enumerate(laws):
        later = len(_positions(schedule, number, first_step)) - 1
        blocks += [law, np.zeros((*law.shape[:-1], later * law.shape[-1]))]
    return np.concatenate(blocks, axis=-1)
