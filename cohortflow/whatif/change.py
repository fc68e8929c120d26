r"""A change to one move, and the rule for who pays.

The move i -> j takes d; the cells of the balance give it up, in proportion to what they hold:

    p_ij <- p_ij + d,     p_ib <- p_ib - d p_ib / sum_b p_ib        b in the balance

    add d    multiply d = (factor - 1) p_ij    set d = size - p_ij
    balance  "proportional": every other allowed move of the row, staying and exits included; or the named
    ones

d can be anything from -p_ij to the sum of the balance: the row then stays a probability row. Where a model
has several rows for a state (bands of tenure, hidden kinds ...) the change acts on each of them, and what
goes to j is spread over the places of j as the row's own moves to j are; where it has none, as the model's
structure says. Changes to one row apply in their order.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component, Schedule
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.states import ALL_LIVE, States
from cohortflow.whatif.landing import landing

Array = NDArray[np.float64]
Rows = NDArray[np.int64]

PROPORTIONAL = "proportional"
HOWS = ("add", "multiply", "set")
ROUNDING = 1e-12


@dataclass(frozen=True, init=False)
class Change:
    """A change to the move `from_` -> `to`, by exactly one of add, multiply and set.

    from_ : a state, or "all_live" for every live state;  to : a state; the same as `from_` means staying
    add : points of probability (0.05 = five points);  multiply : factor;  set : the new probability
    balance : "proportional", a state, or states of the row that take the opposite change
    starts, ends : first and last period of the change (labels or ordinals; periods ahead, 1, 2 ... for a
        model outside any calendar); None = from the first period ahead, for ever
    segment : only customers of this segment

    >>> Change("quiet", "weekly", add=0.05).resized(0.5, "multiply").how
    'multiply'
    """

    from_: str
    to: str
    how: str
    size: float
    balance: str | tuple[str, ...]
    starts: str | int | None
    ends: str | int | None
    segment: str | None

    def __init__(
        self,
        from_: str,
        to: str,
        *,
        add: float | None = None,
        multiply: float | None = None,
        set: float | None = None,
        balance: str | Iterable[str] = PROPORTIONAL,
        starts: str | int | None = None,
        ends: str | int | None = None,
        segment: str | None = None,
    ) -> None:
        given = {how: size for how, size in zip(HOWS, (add, multiply, set), strict=True) if size is not None}
        if len(given) != 1:
            raise CallError(
                f'A change of "{from_}" to "{to}" takes exactly one of add, multiply, set; got '
                f"{listed(given)}. For instance add=0.05."
            )
        ((how, size),) = given.items()
        _check_size(how, size)
        named = (balance,) if isinstance(balance, str) and balance != PROPORTIONAL else balance
        fields = {
            "from_": from_, "to": to, "how": how, "size": float(size), "starts": starts, "ends": ends,
            "balance": named if isinstance(named, str) else tuple(named), "segment": segment,
        }  # fmt: skip
        for name, value in fields.items():
            object.__setattr__(self, name, value)

    def resized(self, size: float, how: str = "add") -> Change:
        """The same lever with another size."""
        kept: dict[str, Any] = {n: getattr(self, n) for n in ("balance", "starts", "ends", "segment")}
        return Change(self.from_, self.to, **(kept | {how: size}))

    def within(self, starts: Any, ends: Any, segment: str | None) -> Change:
        """The change with these dates and this segment where it has none of its own."""
        dated = self.starts is not None or self.ends is not None
        kept: dict[str, Any] = {
            "balance": self.balance,
            "starts": self.starts if dated else starts,
            "ends": self.ends if dated else ends,
            "segment": self.segment or segment,
        }
        return Change(self.from_, self.to, **(kept | {self.how: self.size}))

    def origins(self, states: States) -> tuple[str, ...]:
        """The declared states whose rows change: for "all_live" those live ones that may make the move."""
        target = states.index(self.to)
        if self.from_ != ALL_LIVE:
            self._check_row(states, self.from_)
            return (self.from_,)
        found = tuple(n for n in states.live if n != self.to and states.allowed[states.index(n), target])
        if not found:
            raise CallError(
                f'No live state may move to "{self.to}": the move is declared impossible for all.'
            )
        return found

    def payers(self, states: States, origin: str) -> NDArray[np.bool_]:
        """(K,) the declared cells of the row of `origin` that take the opposite change."""
        allowed = states.allowed[states.index(origin)]
        if self.balance == PROPORTIONAL:
            chosen = allowed.copy()
            chosen[states.index(self.to)] = False
            return chosen
        chosen = states.mask(self.balance)
        if not self.balance or chosen[states.index(self.to)]:
            raise CallError(
                f'The balance of "{origin}" to "{self.to}" is {listed(self.balance)}; it names other moves '
                f'of the row, or is "{PROPORTIONAL}".'
            )
        barred = [n for n in self.balance if not allowed[states.index(n)]]
        if barred and self.from_ != ALL_LIVE:
            raise CallError(
                f'The balance of "{origin}" to "{self.to}" names {listed(barred)}, but that move is declared '
                "impossible; name moves that can happen."
            )
        return chosen & allowed

    def _check_row(self, states: States, origin: str) -> None:
        row = states.index(origin)
        if origin in states.exits:
            raise CallError(f'"{origin}" is an exit: nobody moves out of it, so no change can start from it.')
        if not states.allowed[row, states.index(self.to)]:
            raise CallError(
                f'The move "{origin}" to "{self.to}" is declared impossible; it cannot be changed.'
            )


def changed(schedule: Schedule, changes: Change | Iterable[Change]) -> Schedule:
    """The Schedule under changes that hold in every period (`starts` and `ends` are not looked at).

    Refused with the largest feasible size where a row cannot take a change. See `what_if` for dated changes.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> changed(chain.schedule, Change("steady", "left", add=-0.05)).chain.matrix[1]
    array([0.  , 0.95, 0.05])
    """
    parts = list(schedule.components)
    for change in [changes] if isinstance(changes, Change) else changes:
        for c in concerned(schedule, change):
            new, _ = apply(parts[c].matrices, parts[c], schedule.states, change)
            parts[c] = replace(parts[c], matrices=new)
    return replace(schedule, components=tuple(parts))


def concerned(schedule: Schedule, change: Change) -> list[int]:
    """Positions of the components that a change acts on: all, or the one that carries its segment's name."""
    everyone = list(range(len(schedule.components)))
    if change.segment is None:
        return everyone
    return [c for c in everyone if schedule.components[c].name == change.segment] or everyone


def feasible(schedule: Schedule, change: Change) -> tuple[float, float]:
    """The least and the largest `add` that every row concerned can take, in every matrix of the model.

    >>> from cohortflow import Chain, States
    >>> chain = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    >>> feasible(chain.schedule, Change("here", "gone", add=0.0))
    (-0.1, 0.9)
    """
    low, high = -1.0, 1.0
    for part in (schedule.components[c] for c in concerned(schedule, change)):
        for origin in change.origins(schedule.states):
            held = part.matrices[:, part.report == schedule.states.index(origin)]
            if held.size and not np.isnan(held).any():
                room = Room.of(held, part, schedule.states, change, origin)
                low, high = max(low, -float(room.here.min())), min(high, float(room.pool.min()))
    return low, high


def apply(
    matrices: Array, component: Component, states: States, change: Change, *, clip: bool = False
) -> tuple[Array, float]:
    """Matrices (..., m, m) of a component after one change, and the share of rows that could not take all of
    it.

    clip : rows that cannot take the change take as much of it as they can (for draws, whose rates scatter
        around the estimate); without it they are refused with the largest feasible size
    """
    out, short, count = np.array(matrices, dtype=float), 0, 0
    for origin in change.origins(states):
        rows = np.flatnonzero(component.report == states.index(origin))
        if not len(rows):
            continue
        held = out[..., rows, :]
        if np.isnan(held).any():
            if change.from_ == ALL_LIVE:
                continue
            raise NotIdentified(
                f'The change of "{origin}" to "{change.to}" needs the row of "{origin}", and no departure '
                "from it was seen. Read a longer history, or give the row by hand in a Chain."
            )
        room = Room.of(held, component, states, change, origin)
        step, cut = room.step(change, clip=clip)
        out[..., rows, :] = room.moved(held, component, states, change, rows, step)
        short, count = short + int(cut.sum()), count + cut.size
    return out, short / count if count else 0.0


@dataclass(frozen=True, eq=False)
class Room:
    """What rows (..., r, m) hold: `here` on the move itself, `pool` on the balance, both (..., r)."""

    here: Array
    pool: Array
    onto: NDArray[np.bool_]
    paying: NDArray[np.bool_]
    origin: str

    @classmethod
    def of(cls, held: Array, component: Component, states: States, change: Change, origin: str) -> Room:
        onto = component.report == states.index(change.to)
        if not onto.any():
            raise NotIdentified(
                f'The model\'s part "{component.name}" has no place for "{change.to}": its customers never '
                "get there, so the move cannot be changed for them."
            )
        paying = change.payers(states, origin)[component.report]
        return cls(held[..., onto].sum(axis=-1), held[..., paying].sum(axis=-1), onto, paying, origin)

    def step(self, change: Change, *, clip: bool) -> tuple[Array, NDArray[np.bool_]]:
        """d of each row, and flags of rows that cannot take it whole."""
        wanted = {
            "add": np.full_like(self.here, change.size),
            "multiply": (change.size - 1.0) * self.here,
            "set": change.size - self.here,
        }[change.how]
        cut = (wanted > self.pool + ROUNDING) | (wanted < -self.here - ROUNDING)
        if cut.any() and not clip:
            raise CallError(self._refusal(change, cut))
        return np.clip(wanted, -self.here, self.pool), cut

    def moved(
        self, held: Array, component: Component, states: States, change: Change, rows: Rows, step: Array
    ) -> Array:
        """The rows after the step."""
        gain = _spread(held, self.onto, self.here)
        loss = _spread(held, self.paying, self.pool)
        bare = (self.here <= 0) & (step > 0)
        if bare.any():
            gain = np.where(bare[..., None], landing(component, states, rows, change.to), gain)
        empty = (self.pool <= 0) & (step < 0)
        if empty.any():
            loss = np.where(empty[..., None], self._takers(component, states, change, rows), loss)
        return np.maximum(held + step[..., None] * (gain - loss), 0.0)

    def _takers(self, component: Component, states: States, change: Change, rows: Rows) -> Array:
        names = [n for n, on in zip(states.names, change.payers(states, self.origin), strict=True) if on]
        if len(names) == 1:
            return landing(component, states, rows, names[0])
        raise CallError(
            f'The row of "{self.origin}" has nothing but "{change.to}", so what it loses cannot be shared '
            f"out in proportion; name one move as the balance ({listed(names)})."
        )

    def _refusal(self, change: Change, cut: NDArray[np.bool_]) -> str:
        first = np.unravel_index(int(np.argmax(cut)), cut.shape)
        here, pool = float(self.here[first]), float(self.pool[first])
        ratio = np.divide(self.pool, self.here, out=np.full_like(self.pool, np.inf), where=self.here > 0)
        feasible = {
            "add": f"from {-self.here.min():.6g} to {self.pool.min():.6g}",
            "multiply": f"a factor from 0 to {1.0 + ratio.min():.6g}",
            "set": f"from 0 to {(self.here + self.pool).min():.6g}",
        }[change.how]
        pays = "the rest of the row" if change.balance == PROPORTIONAL else listed(change.balance)
        return (
            f'The change of "{self.origin}" to "{change.to}" by {change.how} {change.size:g} cannot be met: '
            f"the move has {here:.6g}, its balance ({pays}) {pool:.6g}. Feasible is {feasible}."
        )


def _spread(held: Array, where: NDArray[np.bool_], total: Array) -> Array:
    """(..., r, m) law over the cells `where`, in proportion to what they hold; 0 where they hold nothing."""
    safe = np.where(total > 0, total, 1.0)
    return np.where(where, held, 0.0) / safe[..., None]


def _check_size(how: str, size: Any) -> None:
    low, high = {"add": (-1.0, 1.0), "multiply": (0.0, np.inf), "set": (0.0, 1.0)}[how]
    usable = isinstance(size, (int, float, np.floating, np.integer)) and not isinstance(size, bool)
    if not usable or not low <= size <= high or np.isinf(size):
        limits = "at least 0" if how == "multiply" else f"from {low:g} to {high:g}"
        raise CallError(f"{how} is {size!r}; it is a number {limits}.")
