"""The rules of the states in plain words, as the report prints them beside the states."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from cohortflow.report.rounding import unit
from cohortflow.report.text import clean
from cohortflow.study import Condition, StateRule


def rules_in_words(rules: Sequence[StateRule], kind: str) -> Mapping[str, str]:
    """State -> its rule; `kind` is the calendar's kind of period.

    >>> gone = StateRule("gone", "exit", ((Condition("silent_for", ("bought",), k=3),),))
    >>> dict(rules_in_words([gone, StateRule("there")], "month"))
    {'gone': 'no "bought" for 3 months', 'there': 'everybody else'}
    """
    return {rule.name: rule_in_words(rule, kind) for rule in rules}


def rule_in_words(rule: StateRule, kind: str) -> str:
    """One rule: alternatives joined by "or", conditions by "and"."""
    if not rule.when:
        return "everybody else"
    return "; or ".join(" and ".join(condition_in_words(c, kind) for c in each) for each in rule.when)


def condition_in_words(condition: Condition, kind: str) -> str:
    """One condition.

    >>> condition_in_words(Condition("at_least", ("delivered",), k=1, n=3), "month")
    '3 or more "delivered" within 1 month'
    >>> condition_in_words(Condition("tenure_below", k=2), "month")
    'joined less than 2 months ago'
    """
    c, events = condition, _events(condition.events)
    span = f"{c.k} {unit(kind, c.k)}"
    return {
        "last_event": f"the latest of {_events(c.among, 'and')} is {events}",
        "silent_for": f"no {events} for {span}",
        "at_least": f"{c.n} or more {events} within {span}",
        "at_most": f"at most {c.n} {events} within {span}, and there for that long",
        "spent_at_least": f"{c.amount:g} or more spent within {span}",
        "tenure_below": f"joined less than {span} ago" if c.k > 1 else f"joined in this {unit(kind, 1)}",
        "expired_for": f"paid-up date passed {span} ago or more" if c.k else "paid-up date passed",
        "due_within": f"paid-up date within the next {span}",
    }[c.kind]


def _events(names: Sequence[str], joined: str = "or") -> str:
    *before, last = [f'"{clean(name)}"' for name in names] or ['""']
    return f"{', '.join(before)} {joined} {last}" if before else last
