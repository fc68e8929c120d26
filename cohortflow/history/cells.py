"""Rows into cells on the engine: one row a customer and period, holding all that the rules may ask.

Events at one instant are in a declared order (`Study.event_order`), so an event's instant and place make one
number, key = instant * 2^s + place, whose maximum is the latest event: no sorting. That is why instants lie
between 1700 and 2250 (microseconds) and there are at most 1024 events.

    n        rows                         first    smallest key (which rows come before a return)
    seen_w   events seen, 62 bits a word  last_i   largest key among the events of the i-th `among` set
    tie_i    the same with the order of ties reversed: it differs where order at one instant decided
    count_j  rows of the j-th counted set amount   sum of money     until  latest valid-until period
    back_r   smallest key of an event that ends exits of the r-th return set
    origin   key and record number of the first row (segments, weights)

A return inside a period splits it: for such periods the same columns are made again from the first return on.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property

from cohortflow.errors import InputError, listed
from cohortflow.history.engine import Engine, integers
from cohortflow.study import Condition, Study

WORD = 62  # events in a word of bits
MOST_EVENTS = 1024
ROWID_BITS = 40
NEVER, NOT_YET = -(2**63) + 1, 2**63 - 1  # a largest key of no rows, a smallest key of no rows


@dataclass(frozen=True)
class CellPlan:
    """Which columns the cells of an event log need.

    among, counted, returns : sets of event positions, each set once; the sweep finds them by place
    """

    events: int
    among: tuple[frozenset[int], ...]
    counted: tuple[frozenset[int], ...]
    returns: tuple[frozenset[int], ...]
    amount: bool = False
    until: bool = False
    first_rows: bool = False

    @cached_property
    def scale(self) -> int:
        """2^s of the key."""
        return 1 << max(self.events - 1, 1).bit_length()

    @property
    def words(self) -> int:
        """Words of bits for the events seen."""
        return (self.events + WORD - 1) // WORD


def plan_cells(study: Study, *, amount: bool, until: bool, first_rows: bool) -> CellPlan:
    """The columns that the rules of a study need; InputError for more events than a key can hold."""
    place = {name: i for i, name in enumerate(study.event_order)}
    if len(place) > MOST_EVENTS:
        raise InputError(
            f"The study names {len(place)} events; at most {MOST_EVENTS} can be told apart "
            f"(the first are {listed(study.event_order, 3)}). Map several to one name in [events]."
        )

    def positions(names: Sequence[str]) -> frozenset[int]:
        return frozenset(place[n] for n in names)

    conditions = [c for rule in study.rules for c in rule.conditions]
    return CellPlan(
        events=max(len(place), 1),
        among=_each_once(positions(c.among) for c in conditions if c.kind == "last_event"),
        counted=_each_once(positions(c.events) for c in conditions if _is_counted(c)),
        returns=_each_once(positions(study.returns_of(e)) for e in study.states.exits),
        amount=amount,
        until=until,
        first_rows=first_rows,
    )


def _is_counted(condition: Condition) -> bool:
    return condition.kind in ("at_least", "at_most")


def _each_once(sets: Iterable[frozenset[int]]) -> tuple[frozenset[int], ...]:
    return tuple(dict.fromkeys(sets))


def make_cells(engine: Engine, plan: CellPlan, *, used: str, period: str, table: str = "cells") -> None:
    """Fill `cells` (and `split_r` for return sets that split periods) from the used rows of `rows`."""
    engine.drop(table)
    columns = ", ".join(_columns(plan))
    source = f"(SELECT *, rowid AS record, t * {plan.scale} + code AS key FROM rows WHERE {used})"
    engine.run(
        f"CREATE TABLE {table} AS SELECT customer, {period} AS p, {columns} FROM {source} GROUP BY 1, 2"
    )


def make_splits(engine: Engine, plan: CellPlan, r: int, *, used: str, period: str) -> int:
    """Fill `split_{r}`: cells whose first event is no return, made again from the first return on; how many."""
    name = f"split_{r}"
    engine.drop(name)
    mixed = f"SELECT customer, p, back_{r} AS back FROM cells WHERE back_{r} > first AND back_{r} < {NOT_YET}"
    rows = f"SELECT *, rowid AS record, {period} AS p, t * {plan.scale} + code AS key FROM rows WHERE {used}"
    columns = ", ".join(_columns(plan))
    engine.run(
        f"CREATE TABLE {name} AS SELECT customer, p, {columns} FROM ({rows}) AS u JOIN ({mixed}) AS m "
        "USING (customer, p) WHERE key >= back GROUP BY 1, 2"
    )
    return int(engine.one(f"SELECT count(*) FROM {name}"))


def fetch_columns(plan: CellPlan) -> list[str]:
    """What the sweep takes of the cells: the latest event as a place (-1 = none), and whether a return event came
    (0 no, 1 as the period's first, 2 after other rows)."""
    out = ["n", *(f"seen_{w}" for w in range(plan.words))]
    for i in range(len(plan.among)):
        out.append(
            f"(CASE WHEN last_{i} > {NEVER} THEN last_{i} & {plan.scale - 1} ELSE -1 END)::SMALLINT AS last_{i}"
        )
    out += [f"count_{j}" for j in range(len(plan.counted))]
    for r in range(len(plan.returns)):
        late = f"CASE WHEN back_{r} > first THEN 2 ELSE 1 END"
        out.append(f"(CASE WHEN back_{r} < {NOT_YET} THEN {late} ELSE 0 END)::TINYINT AS back_{r}")
    return [*out, *(["amount"] if plan.amount else []), *(["until"] if plan.until else [])]


def decided_by_ties(engine: Engine, plan: CellPlan, verdicts: Sequence[tuple[int, frozenset[int]]]) -> int:
    """Cells in which the order of events at one instant decided a rule.

    verdicts : (place of the `among` set, events that the rule lists)
    """
    turns = []
    for i, listed_events in verdicts:
        if len(plan.among[i]) > 1:
            of = integers(sorted(listed_events))
            one, two = f"(last_{i} & {plan.scale - 1})", f"({plan.scale - 1} - (tie_{i} & {plan.scale - 1}))"
            turns.append(f"(last_{i} > {NEVER} AND ({one} IN {of}) <> ({two} IN {of}))")
    return int(engine.one(f"SELECT count(*) FROM cells WHERE {' OR '.join(turns)}")) if turns else 0


def _columns(plan: CellPlan) -> list[str]:
    reverse = f"key - code + ({plan.scale - 1} - code)"
    out = ["count(*)::INTEGER AS n", "min(key) AS first"]
    for w in range(plan.words):
        bits = f"bit_or(1::BIGINT << (code - {w * WORD}))"
        only = "" if plan.words == 1 else f" FILTER (WHERE code >= {w * WORD} AND code < {(w + 1) * WORD})"
        out.append(f"coalesce({bits}{only}, 0) AS seen_{w}")
    for i, events in enumerate(plan.among):
        only = f"FILTER (WHERE code IN {integers(sorted(events))})"
        out.append(f"coalesce(max(key) {only}, {NEVER}) AS last_{i}")
        if len(events) > 1:
            out.append(f"coalesce(max({reverse}) {only}, {NEVER}) AS tie_{i}")
    for j, events in enumerate(plan.counted):
        out.append(f"(count(*) FILTER (WHERE code IN {integers(sorted(events))}))::INTEGER AS count_{j}")
    for r, events in enumerate(plan.returns):
        out.append(
            f"coalesce(min(key) FILTER (WHERE code IN {integers(sorted(events))}), {NOT_YET}) AS back_{r}"
        )
    if plan.amount:
        out.append("coalesce(sum(amount), 0)::BIGINT AS amount")
    if plan.until:
        out.append("coalesce(max(until), -2147483648)::INTEGER AS until")
    if plan.first_rows:
        out.append(f"min(key::HUGEINT * {1 << ROWID_BITS} + record) AS origin")
    return out
