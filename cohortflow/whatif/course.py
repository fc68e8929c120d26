"""Which matrices act, step by step, when changes have dates.

A dated change turns a model's matrices into a sequence: step h has the matrix that the model has there
anyway, under the changes in force at h. A season that comes round stays a season; once no change begins or
ends any more, the model runs on as it would, with or without them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws, Schedule
from cohortflow.whatif.change import Change, apply, changed, concerned
from cohortflow.whatif.scenario import Window

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Course:
    """A Schedule from a base period on, under dated changes.

    windows : steps in which each change is in force;  first_step : the model's step that leads out of the
        base
    """

    schedule: Schedule
    changes: tuple[Change, ...]
    windows: tuple[Window, ...]
    first_step: int

    @classmethod
    def of(cls, schedule: Schedule, changes: Sequence[Change], base: int | None, first_step: int) -> Course:
        windows = [Window.of(c.starts, c.ends, base, schedule.calendar) for c in changes]
        return cls(schedule, tuple(changes), tuple(windows), first_step)

    def in_force(self, step: int) -> tuple[int, ...]:
        """Which changes act at step h."""
        return tuple(n for n, window in enumerate(self.windows) if window.holds(step))

    @cached_property
    def settled_after(self) -> int:
        """The first step from which on the changes in force stay the same."""
        edges = [e for w in self.windows for e in (w.first, w.last) if np.isfinite(e)]
        return int(max(edges, default=0))

    @cached_property
    def for_ever(self) -> tuple[int, ...]:
        """The changes that stay in force."""
        return self.in_force(self.settled_after)

    def matrix(self, component: int, step: int) -> Array:
        """(m, m) of one component at step h; refused where a change in force cannot be met."""
        held = self.schedule.components[component].matrix(self.first_step + step)
        return self._under(held, component, self.in_force(step))[0]

    def drawn(self, draws: Draws, component: int, step: int) -> tuple[Array, float]:
        """(D, m, m) of a step of drawn matrices, and the share of rows that could not take all of a change.

        Draws of future periods ("common shocks") count from the base, those of a calendar by its places.
        """
        ahead = step if "common shocks" in draws.part else self.first_step + step
        return self._under(draws.matrix(component, ahead), component, self.in_force(step), clip=True)

    def explicit(self, periods: int) -> Schedule:
        """A Schedule that holds the matrices of steps 0 .. periods-1 one by one."""
        parts = []
        for c, part in enumerate(self.schedule.components):
            stack = np.stack([self.matrix(c, h) for h in range(periods)])
            parts.append(replace(part, matrices=stack, tail="hold"))
        return replace(self.schedule, components=tuple(parts), first=None)

    def later(self) -> Schedule:
        """The model as it runs on for ever, at its own place in the calendar."""
        return changed(self.schedule, [self.changes[n] for n in self.for_ever])

    def _under(
        self, matrices: Array, component: int, acting: tuple[int, ...], *, clip: bool = False
    ) -> tuple[Array, float]:
        part = self.schedule.components[component]
        out, short = matrices, 0.0
        for n in acting:
            if component in concerned(self.schedule, self.changes[n]):
                out, share = apply(out, part, self.schedule.states, self.changes[n], clip=clip)
                short = max(short, share)
        return out, short
