"""What the estimator hands to the projector: a Chain, a Schedule of matrices, and Draws of either.

Every model is "weighted components, each a sequence of matrices over an expanded state space, with a map back
to the reported states". A plain Chain is the Schedule with one component, one matrix and no expansion.
Rows are "from", columns "to"; the matrix of step h takes counts from h periods ahead to h + 1.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.markov.arguments import ROW_TOLERANCE
from cohortflow.periods import Calendar
from cohortflow.record import Record, frozen_array
from cohortflow.states import States

TAILS = ("hold", "cycle")


@dataclass(frozen=True, repr=False, eq=False)
class Component:
    """One weighted part of a Schedule.

    matrices : (L, m, m) row-stochastic, the matrices of steps 0 .. L-1 over m expanded states
    report : (m,) position of the declared state that each expanded state is reported as
    start : (K, m) for a customer now in declared state k: this component's share times the law over its
        expanded states. Summed over m and all components each row is 1.
    join : (K, m) the same for a joiner or returner who starts in declared state k
    tail : after the last matrix "hold" it, or "cycle" from the first again
    name : short name of the component ("all", "movers", "type 1" ...)
    """

    matrices: np.ndarray
    report: np.ndarray
    start: np.ndarray
    join: np.ndarray
    tail: str = "hold"
    name: str = "all"

    def __post_init__(self) -> None:
        for field, dtype in (("matrices", float), ("report", np.int64), ("start", float), ("join", float)):
            object.__setattr__(self, field, frozen_array(getattr(self, field), dtype))
        length, size, width = self.matrices.shape if self.matrices.ndim == 3 else (0, -1, -2)
        if not length or size != width or self.report.shape != (size,) or self.start.shape[1:] != (size,):
            raise CallError(
                f"A component needs matrices (L, m, m), report (m,) and start (K, m); got "
                f"{self.matrices.shape}, {self.report.shape} and {self.start.shape}."
            )
        if self.tail not in TAILS:
            raise CallError(f'Unknown tail "{self.tail}". Allowed: {listed(TAILS)}.')

    def position(self, step: int) -> int:
        """Which of the L matrices acts at step 0, 1, 2 ..."""
        length = len(self.matrices)
        return step % length if self.tail == "cycle" else min(step, length - 1)

    def matrix(self, step: int) -> np.ndarray:
        """(m, m) matrix of step 0, 1, 2 ..."""
        return self.matrices[self.position(step)]

    def collapse(self, size: int) -> np.ndarray:
        """(m, K) 0/1 map from expanded to declared states."""
        return np.eye(size)[self.report]


@dataclass(frozen=True, repr=False, eq=False)
class Schedule(Record):
    """Weighted components over the declared states: the one form that every model takes.

    `unknown` names declared states whose row is not identified (no departures seen); anything that can reach
    one of them is NaN with that reason. `first` is the ordinal of the period in which step 0 begins, where the
    matrices belong to calendar periods. CallError when the components' laws do not add up to 1.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> summer, winter = np.eye(3), [[0.0, 0.8, 0.2], [0.0, 0.9, 0.1], [0.0, 0.0, 1.0]]
    >>> part = Component([summer, winter], [0, 1, 2], np.eye(3), np.eye(3), tail="cycle")
    >>> Schedule(states, (part,))
    <schedule of 1 component(s) per month; all: 2 x 3 states (cycle)>
    """

    states: States
    components: tuple[Component, ...]
    calendar: Calendar = Calendar("month")
    first: int | None = None
    unknown: tuple[str, ...] = ()
    kind: ClassVar[str] = "schedule"

    def __post_init__(self) -> None:
        for field in ("start", "join"):
            total = sum(getattr(c, field).sum(axis=1) for c in self.components)
            if not np.allclose(total, 1.0, atol=1e-9):
                raise CallError(
                    f"The components' {field} laws must add up to 1 for each state; they add up to {total}."
                )

    @property
    def is_plain(self) -> bool:
        """One component, one matrix, no expanded states: a time-homogeneous chain on the declared states."""
        only = self.components[0]
        return (
            len(self.components) == 1
            and len(only.matrices) == 1
            and np.array_equal(only.report, np.arange(len(self.states)))
        )

    @property
    def chain(self) -> Chain:
        """The plain chain; NotIdentified when the model is not one chain on the declared states."""
        if not self.is_plain:
            raise NotIdentified(
                "This model is not a single chain on the declared states, so it has no one matrix; "
                "project it, or fit the plain model."
            )
        return Chain(self.states, self.components[0].matrices[0], period=self.calendar)

    def expand(self, counts: np.ndarray, *, joining: bool = False) -> list[np.ndarray]:
        """(..., K) counts by declared state as one (..., m) array a component."""
        return [np.asarray(counts) @ (c.join if joining else c.start) for c in self.components]

    def collapse(self, parts: Sequence[np.ndarray]) -> np.ndarray:
        """The inverse map: (..., m) arrays, one a component, to (..., K) counts by declared state."""
        size = len(self.states)
        return sum(
            (part @ c.collapse(size) for part, c in zip(parts, self.components, strict=True)),
            start=np.zeros(size),
        )

    def to_frame(self) -> pd.DataFrame:
        """component, step, from, to, probability over expanded states (numbered within reported names)."""
        frames = []
        for c in self.components:
            names = _expanded_names(self.states, c.report)
            step, origin, target = np.meshgrid(
                np.arange(len(c.matrices)), np.arange(len(names)), np.arange(len(names)), indexing="ij"
            )
            labels = np.array(names, dtype=object)
            frames.append(
                pd.DataFrame(
                    {
                        "component": c.name,
                        "step": step.ravel(),
                        "from": labels[origin.ravel()],
                        "to": labels[target.ravel()],
                        "probability": c.matrices.ravel(),
                    }
                )
            )
        return pd.concat(frames, ignore_index=True)

    def headline(self) -> str:
        sizes = ", ".join(
            f"{c.name}: {len(c.matrices)} x {len(c.report)} states ({c.tail})" for c in self.components
        )
        return f"schedule of {len(self.components)} component(s) per {self.calendar.kind}; {sizes}"


@dataclass(frozen=True, repr=False, eq=False)
class Chain(Record):
    """One labelled transition matrix per period.

    Parameters
    ----------
    states : States
    matrix : (K, K) row-stochastic; a row of NaN means "no data" for that state
    period : the length of one step, as a word ("month") or a Calendar

    Raises CallError when a row is not a probability row, an exit is not absorbing, or a move declared
    impossible has a probability.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> Chain(states, [[0.0, 0.8, 0.2], [0.0, 0.9, 0.1], [0.0, 0.0, 1.0]])
    <chain of 3 states per month, 1 exit>
    """

    states: States
    matrix: np.ndarray
    period: Calendar
    kind: ClassVar[str] = "chain"

    def __init__(self, states: States, matrix: Any, *, period: str | Calendar = "month") -> None:
        values = matrix.to_numpy(dtype=float) if isinstance(matrix, pd.DataFrame) else matrix
        object.__setattr__(self, "states", states)
        object.__setattr__(self, "matrix", frozen_array(values))
        object.__setattr__(self, "period", period if isinstance(period, Calendar) else Calendar(period))
        self._check()

    def _check(self) -> None:
        size = len(self.states)
        if self.matrix.shape != (size, size):
            raise CallError(f"The matrix of {size} states must be {size} x {size}; it is {self.matrix.shape}.")
        known = ~np.isnan(self.matrix).any(axis=1)
        filled = np.where(known[:, None], self.matrix, np.eye(size))
        for name, row in zip(self.states.names, filled, strict=True):
            if not (row.min() >= 0 and abs(row.sum() - 1) <= ROW_TOLERANCE):
                raise CallError(
                    f'The row of "{name}" is not a probability row: smallest entry {row.min():.6g}, sum '
                    f"{row.sum():.12g}. Entries must be at least 0 and each row must sum to 1."
                )
        for row, column in np.argwhere((filled > 0) & ~self.states.allowed & known[:, None]):
            a, b = self.states.names[row], self.states.names[column]
            why = "an exit is absorbing" if a in self.states.exits else "the move is declared impossible"
            raise CallError(f'The move "{a}" to "{b}" has probability {filled[row, column]:g}, but {why}.')

    @cached_property
    def unknown(self) -> tuple[str, ...]:
        """States without a single observed departure (rows of NaN)."""
        missing = np.isnan(self.matrix).any(axis=1)
        return tuple(n for n, m in zip(self.states.names, missing, strict=True) if m)

    @cached_property
    def schedule(self) -> Schedule:
        """The same chain as a Schedule; rows without data are NaN there too."""
        size = len(self.states)
        component = Component(self.matrix[None], np.arange(size), np.eye(size), np.eye(size))
        return Schedule(self.states, (component,), self.period, unknown=self.unknown)

    @property
    def frame(self) -> pd.DataFrame:
        """The matrix as a labelled DataFrame, row = from."""
        return pd.DataFrame(self.matrix, index=list(self.states.names), columns=list(self.states.names))

    def to_frame(self) -> pd.DataFrame:
        """from, to, probability: one row a pair of states."""
        size = len(self.states)
        names = np.array(self.states.names, dtype=object)
        return pd.DataFrame(
            {
                "from": np.repeat(names, size),
                "to": np.tile(names, size),
                "probability": self.matrix.ravel(),
            }
        )

    def headline(self) -> str:
        exits = len(self.states.exits)
        plural = "" if exits == 1 else "s"
        return f"chain of {len(self.states)} states per {self.period.kind}, {exits} exit{plural}"

    def about(self) -> Mapping[str, Any]:
        return {"period": self.period.kind, "exits": list(self.states.exits)}


@dataclass(frozen=True, repr=False, eq=False)
class Draws(Record):
    """D draws of a Schedule's matrices from the law of their estimation error (or of future rates).

    schedule : the Schedule that the draws scatter around
    matrices : one (D, L, m, m) array a component
    start, join : one (D or 1, K, m) array a component
    part : what scatters: "rates" (estimation) or "rates and common shocks" (future periods differ as well)

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0.0, 0.8, 0.2], [0.0, 0.9, 0.1], [0.0, 0.0, 1.0]])
    >>> draws = Draws.of_matrices(chain.schedule, [np.stack([[chain.matrix], [np.eye(3)]])])
    >>> draws.matrix(0, step=7)[:, 1, 1].tolist()
    [0.9, 1.0]
    """

    schedule: Schedule
    matrices: tuple[np.ndarray, ...]
    start: tuple[np.ndarray, ...]
    join: tuple[np.ndarray, ...]
    part: str = "rates"
    kind: ClassVar[str] = "draws"

    @property
    def size(self) -> int:
        """D, the number of draws."""
        return len(self.matrices[0])

    @classmethod
    def of_matrices(cls, schedule: Schedule, matrices: Sequence[np.ndarray], part: str = "rates") -> Draws:
        """Draws in which only the matrices scatter; the start and join laws are the Schedule's."""
        return cls(
            schedule,
            tuple(frozen_array(m) for m in matrices),
            tuple(c.start[None] for c in schedule.components),
            tuple(c.join[None] for c in schedule.components),
            part,
        )

    def matrix(self, component: int, step: int) -> np.ndarray:
        """(D, m, m) matrices of step 0, 1, 2 ... of one component."""
        drawn = self.matrices[component]
        tail = self.schedule.components[component].tail
        length = drawn.shape[1]
        return drawn[:, step % length if tail == "cycle" else min(step, length - 1)]

    def to_frame(self) -> pd.DataFrame:
        """component, step, from, to, mean and sd over the draws (expanded states by number)."""
        frames = []
        for component, drawn in zip(self.schedule.components, self.matrices, strict=True):
            step, origin, target = np.indices(drawn.shape[1:])
            frames.append(
                pd.DataFrame(
                    {
                        "component": component.name,
                        "step": step.ravel(),
                        "from": origin.ravel(),
                        "to": target.ravel(),
                        "mean": drawn.mean(axis=0).ravel(),
                        "sd": drawn.std(axis=0, ddof=1).ravel(),
                    }
                )
            )
        return pd.concat(frames, ignore_index=True)

    def headline(self) -> str:
        return f"{self.size:,} draws of a schedule ({self.part})"


def _expanded_names(states: States, report: np.ndarray) -> list[str]:
    names = [states.names[r] for r in report]
    if len(set(names)) == len(names):
        return names
    seen: dict[str, int] = {}
    out = []
    for name in names:
        seen[name] = seen.get(name, 0) + 1
        out.append(f"{name} #{seen[name]}")
    return out
