"""The `when` of each state: read into conditions, and the contradictions that can be seen without data."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from cohortflow.errors import listed
from cohortflow.study.parts import CONDITIONS, Condition, StateRule
from cohortflow.study.source import Table, shown_value

WHEN_KEYS = (*CONDITIONS, "of", "among", "within", "all")
_NEEDS_WITHIN = ("at_least", "at_most", "spent_at_least")
_TAKES_OF = ("silent_for", "at_least", "at_most")
_LEAST = {"silent_for": 1, "at_least": 1, "at_most": 0, "tenure_below": 1, "expired_for": 0, "due_within": 1}

Alternatives = tuple[tuple[Condition, ...], ...]


def read_rules(tables: Sequence[Table], roles: Sequence[str]) -> tuple[StateRule, ...]:
    """The rules of all [[state]] tables, `of` and `among` filled in, contradictions refused."""
    rules = tuple(
        StateRule(table.data["name"], role, _when(table) if "when" in table else ())
        for table, role in zip(tables, roles, strict=True)
    )
    _check_memory(tables, rules)
    rules = _filled(tables, rules)
    _check_exits(tables, rules)
    _check_reachable(tables, rules)
    return rules


def _when(table: Table) -> Alternatives:
    value = table.data["when"]
    if not isinstance(value, list):
        return _alternative(table, value)
    if not value:
        raise table.refuse("when", "is an empty list; leave `when` out for the state of everybody else.")
    return tuple(conditions for item in value for conditions in _alternative(table, item))


def _alternative(table: Table, value: Any) -> Alternatives:
    """One table of `when`; a table always gives one alternative."""
    if not isinstance(value, dict):
        raise table.refuse(
            "when",
            "needs a table of conditions like { silent_for = 2 }, or a list of them "
            f'joined by "or"; got {shown_value(value)}.',
        )
    rule = table.inner("when", value, WHEN_KEYS)
    return (_conditions(table, rule),)


def _conditions(table: Table, rule: Table) -> tuple[Condition, ...]:
    found = [_condition(rule, kind) for kind in CONDITIONS if kind in rule]
    _check_modifiers(rule)
    if "all" in rule:
        parts = rule.get("all", None, list, "a list of tables")
        found += [c for part in parts for c in _conditions(table, rule.inner("all", part, WHEN_KEYS))]
    if not found:
        raise rule.refuse("when", f"no condition in it; it needs one of {listed(CONDITIONS)} or `all`.")
    return tuple(found)


def _condition(rule: Table, kind: str) -> Condition:
    events = rule.texts("of", ()) if kind in _TAKES_OF else ()
    within = rule.integer("within", least=1) if kind in _NEEDS_WITHIN else 0
    if kind == "last_event":
        condition = Condition(kind, rule.texts(kind), rule.texts("among", ()))
        _check_last_event(rule, condition)
        return condition
    if kind == "spent_at_least":
        return Condition(kind, k=within, amount=rule.number_of(kind))
    size = rule.integer(kind, least=_LEAST[kind])
    if kind in ("at_least", "at_most"):
        return Condition(kind, events, k=within, n=size)
    return Condition(kind, events, k=size)


def _check_last_event(rule: Table, condition: Condition) -> None:
    if not condition.events:
        raise rule.refuse("last_event", "is an empty list; name at least one event.")
    outside = [e for e in condition.events if e not in condition.among]
    if condition.among and outside:
        raise rule.refuse(
            "among", f"leaves out {listed(outside)}, which last_event names; add it to `among`."
        )


def _check_modifiers(rule: Table) -> None:
    for modifier, kinds in (("of", _TAKES_OF), ("within", _NEEDS_WITHIN), ("among", ("last_event",))):
        if modifier not in rule:
            continue
        if not any(kind in rule for kind in kinds):
            raise rule.refuse(modifier, f"does nothing without {' or '.join(kinds)} in the same table.")
        if modifier != "within" and not rule.data[modifier]:
            raise rule.refuse(modifier, "is an empty list; leave it out for every event that any rule uses.")


def _check_memory(tables: Sequence[Table], rules: Sequence[StateRule]) -> None:
    """`among` is needed as soon as two conditions use last_event."""
    asking = [(i, c) for i, rule in enumerate(rules) for c in rule.conditions if c.kind == "last_event"]
    for i, condition in asking:
        if len(asking) > 1 and not condition.among:
            raise tables[i].refuse(
                "when",
                "last_event needs `among` (the events it is the latest of), because "
                "more than one rule uses last_event.",
            )


def _filled(tables: Sequence[Table], rules: tuple[StateRule, ...]) -> tuple[StateRule, ...]:
    """`of` and `among` default to every event that any rule names."""
    conditions = [c for rule in rules for c in rule.conditions]
    used = tuple(dict.fromkeys(e for c in conditions for e in (*c.events, *c.among)))

    def fill(table: Table, condition: Condition) -> Condition:
        if condition.kind in _TAKES_OF and not condition.events:
            if not used:
                raise table.refuse(
                    "when",
                    f"{condition.kind} needs `of` (the events it counts), because no rule names any event.",
                )
            return replace(condition, events=used)
        if condition.kind == "last_event" and not condition.among:
            return replace(condition, among=used)
        return condition

    return tuple(
        replace(rule, when=tuple(tuple(fill(table, c) for c in alternative) for alternative in rule.when))
        for table, rule in zip(tables, rules, strict=True)
    )


def _check_exits(tables: Sequence[Table], rules: Sequence[StateRule]) -> None:
    for table, rule in zip(tables, rules, strict=True):
        if rule.role == "exit" and any(c.kind == "tenure_below" for c in rule.conditions):
            raise table.refuse(
                "when",
                "tenure_below cannot be used by an exit: leaving would depend on when the "
                "customer joined, not on what was seen.",
            )


def _check_reachable(tables: Sequence[Table], rules: Sequence[StateRule]) -> None:
    for i, rule in enumerate(rules):
        for earlier in rules[:i]:
            if not earlier.when:
                raise tables[i].refuse(
                    "name",
                    f'no customer can reach this state: "{earlier.name}" before it has '
                    "no `when` and takes everybody. Put that state last.",
                )
        blockers = [_blocker(alternative, rules[:i]) for alternative in rule.when]
        if rule.when and all(blockers):
            raise tables[i].refuse(
                "when",
                "no customer can reach this state: whoever fits it is taken before by "
                f"{listed(dict.fromkeys(b for b in blockers if b))}. Put the "
                "narrower rule first.",
            )
    if rules and rules[-1].when:
        raise tables[-1].refuse(
            "when",
            "every state has a `when`, so a customer who fits no rule would have no "
            "state; leave `when` out of the last one (everybody else).",
        )


def _blocker(alternative: tuple[Condition, ...], earlier: Sequence[StateRule]) -> str | None:
    """The first earlier state that takes everybody who fits these conditions."""
    for rule in earlier:
        for other in rule.when:
            if all(any(implies(c, wanted) for c in alternative) for wanted in other):
                return rule.name
    return None


def implies(a: Condition, b: Condition) -> bool:
    """Whether whoever fits condition `a` fits `b` too, as far as the numbers alone tell.

    >>> implies(Condition("silent_for", ("bought",), k=3), Condition("silent_for", ("bought",), k=2))
    True
    >>> implies(Condition("silent_for", ("bought",), k=2), Condition("silent_for", ("bought",), k=3))
    False
    """
    if a.kind != b.kind:
        return False
    if a.kind == "last_event":
        return set(a.events) <= set(b.events) and set(a.among) == set(b.among)
    if set(a.events) != set(b.events):
        return False
    return {
        "silent_for": a.k >= b.k,
        "at_least": a.n >= b.n and a.k <= b.k,
        "at_most": a.n <= b.n and a.k == b.k,
        "spent_at_least": a.amount >= b.amount and a.k == b.k,
        "tenure_below": a.k <= b.k,
        "expired_for": a.k >= b.k,
        "due_within": a.k <= b.k,
    }[a.kind]
