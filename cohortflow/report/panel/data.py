"""What the panel computes from: the schedule, the opening, joiners and money, as plain numbers for a page."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component, Schedule
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.projector import accept
from cohortflow.projector.joiners import Joiners, period_label
from cohortflow.projector.mix import filled
from cohortflow.projector.project import as_joiners
from cohortflow.whatif.change import Change, feasible
from cohortflow.whatif.landing import landing
from cohortflow.whatif.money import Money, as_money

Array = NDArray[np.float64]

SHORT = (
    "Some changes together ask for more than the moves of a state can give; they are made as far as they go."
)
TEN_POINTS, FINE, COARSE = 0.10, 5, 10  # steps of a slider, in hundredths of a point


@dataclass(frozen=True, eq=False)
class PanelData:
    """The panel's numbers: `json` ready, and what the page says in words.

    moves : (from, to, rate now or None, least, most, step) with sizes in hundredths of a point
    labels : the base period and the H ahead
    """

    schedule: Schedule
    numbers: Mapping[str, Any]
    moves: tuple[tuple[str, str, float | None, int, int, int], ...]
    labels: tuple[str, ...]
    joins: bool
    currency: str
    base: int | None


def panel_data(
    model: Any,
    *,
    moves: Sequence[tuple[str, str]],
    periods: int,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    base_period: str | int | None = None,
) -> PanelData:
    """The data of a panel with a slider for each of `moves`; arguments as for `what_if`.

    CallError for a move that cannot be changed; NotIdentified when the model has rows without data.

    >>> from cohortflow import Chain, States
    >>> chain = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    >>> panel_data(chain, moves=[("here", "gone")], periods=2, start={"here": 10}).moves
    (('here', 'gone', 0.1, -1000, 1000, 10),)
    """
    schedule = accept.as_schedule(model)
    if schedule.unknown:
        raise NotIdentified(
            f"The panel needs the rates of every state, and there are no data for {listed(schedule.unknown)}."
        )
    if not moves:
        raise CallError("The panel has nothing to move: name at least one (from, to) pair in moves=.")
    counts = accept.opening(model, start, schedule.states)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    coming = as_joiners(joiners, schedule, base, accept.as_periods(periods))
    money = as_money(value, schedule)
    sliders = [_slider(schedule, origin, to) for origin, to in moves]
    numbers = {
        **_people(schedule, counts, coming, joiners),
        **_money(money, periods),
        "components": [_component(part, first) for part in schedule.components],
        "moves": [_move(schedule, *slider[:3]) for slider in sliders],
        "labels": list(_labels(schedule, base, periods)),
        "short": SHORT,
    }
    joins = bool(coming.expected("joined").any())
    return PanelData(schedule, numbers, tuple(sliders), tuple(numbers["labels"]), joins, money.currency, base)


def _labels(schedule: Schedule, base: int | None, periods: int) -> list[str]:
    found = [period_label(schedule.calendar, base, h) for h in range(periods + 1)]
    return [label if label is not None else str(h) for h, label in enumerate(found)]


def _slider(schedule: Schedule, origin: str, to: str) -> tuple[str, str, float | None, int, int, int]:
    """(from, to, rate, least, most, step): from taking the move away to ten points more, or twice the
    rate.
    """
    low, high = feasible(schedule, Change(origin, to, add=0.0))
    states = schedule.states
    rate = None
    if schedule.is_plain:
        rate = float(schedule.components[0].matrices[0, states.index(origin), states.index(to)])
    up = min(high, max(TEN_POINTS, -low))
    step = FINE if up - low < TEN_POINTS / 2 else COARSE
    least, most = (int(np.floor(1e4 * abs(v) / step + 1e-9)) * step for v in (low, up))
    return origin, to, rate, -least, most, step


def _people(schedule: Schedule, counts: Array, coming: Joiners, joiners: Any) -> dict[str, Any]:
    states = schedule.states
    cycle = min(coming.periods, schedule.calendar.cycle)
    joined, returned = (coming.expected(kind) for kind in ("joined", "returned"))
    exits = np.flatnonzero(states.exit_mask)
    return {
        "states": list(states.names),
        "live": np.flatnonzero(states.live_mask).tolist(),
        "exits": states.exit_mask.astype(int).tolist(),
        "exit_states": exits.tolist(),
        "opening": counts.tolist(),
        "joined": joined.tolist(),
        "returned": returned.tolist(),
        "constant_joined": joined[-cycle:].mean(axis=0).tolist(),
        "constant_returned": returned[-cycle:].mean(axis=0).tolist(),
        "settles": bool(len(exits) and (joined.any() or returned.any())),
    }


def _money(money: Money, periods: int) -> dict[str, Any]:
    terms = money.terms
    if terms is None:
        return {"amounts": None, "discount": None}
    return {
        "amounts": terms.amounts().tolist(),
        "discount": np.power(terms.factor, np.arange(periods) + terms.lag).tolist(),
    }


def _component(part: Component, first: int) -> dict[str, Any]:
    return {
        "matrices": [_sparse(filled(matrix)) for matrix in part.matrices],
        "report": part.report.tolist(),
        "start": _sparse(part.start),
        "join": _sparse(part.join),
        "tail": part.tail,
        "first": first,
    }


def _sparse(matrix: Array) -> list[list[float]]:
    """Each row as column, value, column, value ..."""
    return [[v for j in np.flatnonzero(row) for v in (int(j), float(row[j]))] for row in matrix]


def _move(schedule: Schedule, origin: str, to: str, rate: float | None) -> dict[str, Any]:
    """One slider's move: who pays, and where it lands in rows that never made it."""
    states = schedule.states
    change = Change(origin, to, add=0.0)
    places = {}
    for c, part in enumerate(schedule.components):
        own = np.flatnonzero(part.report == states.index(origin))
        onto = part.report == states.index(to)
        bare = own[(filled(part.matrices)[:, own][:, :, onto].sum(axis=2) <= 0).any(axis=0)]
        if len(bare):
            laws = landing(part, states, bare, to)
            places[str(c)] = {str(int(r)): law.tolist() for r, law in zip(bare, laws, strict=True)}
    return {
        "from": states.index(origin),
        "to": states.index(to),
        "rate": rate,
        "pays": change.payers(states, origin).astype(int).tolist(),
        "landing": places,
    }
