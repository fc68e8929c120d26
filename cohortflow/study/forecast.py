"""[totals], [model], [joiners], [value], [budget], [people]: how the counts become a forecast."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from cohortflow.errors import listed
from cohortflow.periods import Calendar
from cohortflow.record import frozen_mapping
from cohortflow.states import ALL_LIVE, States
from cohortflow.study.parts import (
    JOINER_KINDS,
    JOINER_METHODS,
    MODELS,
    TIMINGS,
    BudgetRow,
    InputSpec,
    JoinerSpec,
    ModelSpec,
    MoveValue,
    People,
    PlannedJoiners,
    ValueSpec,
)
from cohortflow.study.side_files import read_rows
from cohortflow.study.source import Table

MODEL_KEYS = ("name", "window", "half_life", "bands", "types", "exclude")
JOINER_KEYS = ("method", "file")
VALUE_KEYS = (
    "currency",
    "discount_rate",
    "timing",
    "first_period_discounted",
    "per_period",
    "margin",
    "on_move",
)
PEOPLE_KEYS = ("prepared_by", "checked_by", "approved_by")


@dataclass(frozen=True)
class Ground:
    """What the tables of the forecast refer to."""

    folder: Path
    states: States
    calendar: Calendar
    last_complete: int | None
    input: InputSpec
    totals: Mapping[str, tuple[str, ...]]

    @property
    def quantities(self) -> tuple[str, ...]:
        """Names of the sums and states that are projected."""
        return (ALL_LIVE, *self.totals, *self.states.remaining)


def read_totals(table: Table, states: States) -> Mapping[str, tuple[str, ...]]:
    """Named sums of states; `all_live` is reserved and always there."""
    totals = {}
    for name in table.data:
        if name == ALL_LIVE:
            raise table.refuse(name, "is reserved: the sum of the live states is always there.")
        if name in states.names:
            raise table.refuse(name, "is the name of a state; choose another name for the total.")
        totals[name] = table.texts(name)
        for state in totals[name]:
            table.one_of(name, state, states.remaining, "state (exits cannot be added)")
    return frozen_mapping(totals)


def read_model(table: Table, calendar: Calendar) -> ModelSpec:
    """The [model] table; `exclude` as ordinals."""
    bands = table.get("bands", [], list, "a list of whole numbers like [1, 3, 12]")
    rising = all(isinstance(b, int) and not isinstance(b, bool) and b >= 1 for b in bands)
    if not rising or sorted(set(bands)) != list(bands):
        raise table.refuse("bands", f"needs rising whole numbers from 1 on, got {bands}.")
    half_life = table.number_of("half_life", None)
    if half_life is not None and half_life <= 0:
        raise table.refuse("half_life", f"needs a number above 0, got {half_life:g}.")
    exclude = tuple(table.attempt("exclude", calendar.parse, label) for label in table.texts("exclude", ()))
    return ModelSpec(
        name=table.text("name", "plain", choices=(*MODELS, "best")),
        window=table.integer("window", None, least=1),
        half_life=half_life,
        bands=tuple(bands),
        types=table.integer("types", None, least=2),
        exclude=tuple(sorted(exclude)),
    )


def read_joiners(table: Table, ground: Ground) -> JoinerSpec:
    """The [joiners] table; with the method "planned" its file is read too."""
    method = table.text("method", "constant", choices=JOINER_METHODS)
    file = table.text("file", None)
    if method != "planned":
        return JoinerSpec(method, file)
    if file is None:
        raise table.refuse(
            "file",
            'missing; the method "planned" needs a file with the columns period, kind, '
            "state, customers (and segment).",
        )
    return JoinerSpec(method, file, _planned(table, file, ground))


def _planned(table: Table, file: str, ground: Ground) -> tuple[PlannedJoiners, ...]:
    planned = []
    for row in read_rows(
        table, "file", ground.folder, file, ("period", "kind", "state", "customers"), ("segment",)
    ):
        customers = row.number("customers")
        if customers < 0:
            raise row.refuse("customers", f"needs a number of at least 0, got {customers:g}.")
        planned.append(
            PlannedJoiners(
                row.period("period", ground.calendar),
                row.one_of("kind", JOINER_KINDS),
                row.one_of("state", ground.states.remaining),
                customers,
                row.values.get("segment") or None,
            )
        )
    return tuple(planned)


def read_value(table: Table, ground: Ground) -> ValueSpec:
    """The [value] table."""
    per_period = _per_period(table, ground)
    margin = table.number_of("margin", None, least=0.0, most=1.0)
    if per_period is None and margin is None:
        raise table.refuse(
            "margin", 'missing; per_period = "observed" needs the share of an amount that is kept.'
        )
    if per_period is not None and margin is not None:
        raise table.refuse("margin", 'does nothing unless per_period = "observed".')
    return ValueSpec(
        currency=table.text("currency"),
        per_period=per_period,
        margin=margin,
        discount_rate=table.number_of("discount_rate", 0.0, least=0.0),
        timing=table.text("timing", "middle", choices=TIMINGS),
        first_period_discounted=table.flag("first_period_discounted", None),
        on_move=_on_move(table, ground.states),
    )


def _per_period(table: Table, ground: Ground) -> Mapping[str, float] | None:
    given = (
        table.get("per_period", ..., (dict, str), 'amounts by state, or "observed"')
        if "per_period" in table
        else None
    )
    if given is None:
        raise table.refuse(
            "per_period", 'missing; it needs amounts by state like { steady = 30.0 }, or "observed".'
        )
    if isinstance(given, dict):
        return amounts_by_state(table, ground.states)
    if given != "observed":
        raise table.refuse("per_period", f'needs amounts by state, or "observed"; got the text "{given}".')
    if ground.input.amount is None:
        raise table.refuse("per_period", '"observed" needs the column of the money: [input] amount.')
    return None


def amounts_by_state(table: Table, states: States) -> Mapping[str, float]:
    """`per_period = { state = amount }`."""
    inner = table.inner("per_period", table.data["per_period"], None)
    amounts = {}
    for name in inner.data:
        inner.one_of(name, name, states.remaining, "state (exits have no value)")
        amounts[name] = inner.number_of(name)
    return frozen_mapping(amounts)


def _on_move(table: Table, states: States) -> tuple[MoveValue, ...]:
    moves = []
    for item in table.get("on_move", [], list, "a list of tables { from, to, amount }"):
        inner = table.inner("on_move", item, ("from", "to", "amount"))
        origin, target = move_of(inner, states)
        moves.append(MoveValue(origin, target, inner.number_of("amount")))
    return tuple(moves)


def move_of(table: Table, states: States, extra: tuple[str, ...] = ()) -> tuple[str, str]:
    """`from` and `to` of one table, which must be a possible move."""
    origin = table.one_of("from", table.text("from"), (*states.remaining, *extra), "state")
    target = table.one_of("to", table.text("to"), states.names, "state")
    if origin in states.names and not states.allowed[states.index(origin), states.index(target)]:
        raise table.refuse("to", f'the move from "{origin}" to "{target}" is declared impossible in [moves].')
    return origin, target


def read_budget(table: Table, ground: Ground) -> tuple[BudgetRow, ...]:
    """The budget file named in [budget]."""
    file = table.text("file")
    rows = read_rows(table, "file", ground.folder, file, ("period", "total", "amount"), ())
    return tuple(
        BudgetRow(
            row.period("period", ground.calendar),
            row.one_of("total", ground.quantities),
            row.number("amount"),
        )
        for row in rows
    )


def read_people(table: Table) -> People:
    """The [people] table; empty texts are allowed: a line to sign."""
    return People(**{key: table.get(key, "", str, "a text") for key in PEOPLE_KEYS})


def later_than_base(table: Table, key: str, ordinal: int, ground: Ground) -> int:
    """`ordinal` if it lies ahead of the last complete period."""
    if ground.last_complete is not None and ordinal <= ground.last_complete:
        last = ground.calendar.label(ground.last_complete)
        raise table.refuse(
            key, f"{ground.calendar.label(ordinal)} is not ahead: the last complete period is {last}."
        )
    return ordinal


def repeated(names: list[str]) -> str:
    """The names that come more than once, for a message; empty when none does."""
    twice = sorted({name for name in names if names.count(name) > 1})
    return listed(twice) if twice else ""
