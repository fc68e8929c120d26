"""The rules of a study in plain words, for the page of what was counted."""

from __future__ import annotations

from typing import Any

from cohortflow.report.rounding import decimal, unit
from cohortflow.report.text import label, listing


def rule_words(rule: Any, kind: str = "own") -> str:
    """A StateRule as a sentence without its subject; "everybody else" when it has no condition.

    kind : of the calendar, for "month", "week" ...

    >>> from cohortflow.study import Condition, StateRule
    >>> silent = Condition("silent_for", ("delivered",), k=2)
    >>> rule_words(StateRule("quiet", "live", ((silent,),)))
    'no delivered in the last 2 periods (a new stay is given that time)'
    >>> rule_words(StateRule("rest"))
    'everybody else'
    """
    if not rule.when:
        return "everybody else"
    return "; or ".join(", and ".join(condition_words(c, kind) for c in group) for group in rule.when)


def condition_words(condition: Any, kind: str = "own") -> str:
    """One condition in words."""
    events = _or([label(e) for e in condition.events])
    k, one = condition.k, unit(kind, 1)
    last = one if k == 1 else f"last {k} {unit(kind)}"
    words = {
        "last_event": f"the latest of {listing([label(e) for e in condition.among])} is {events}",
        "silent_for": f"no {events} in the {last} (a new stay is given that time)",
        "at_least": f"{condition.n} or more {events} in the {last}",
        "at_most": f"at most {condition.n} {events} in the {last}, and the stay is older",
        "spent_at_least": f"spent {decimal(condition.amount, 2)} or more in the {last}",
        "tenure_below": "joined in this " + one if k == 1 else f"joined in this {one} or the {k - 1} before",
        "expired_for": "paid-up-to date has passed"
        if k == 0
        else f"paid-up-to date passed {k} or more whole {unit(kind)} ago",
        "due_within": f"paid-up-to date falls in the next {one if k == 1 else f'{k} {unit(kind)}'}",
    }
    return words[condition.kind]


def _or(names: list[str]) -> str:
    return " or ".join(names) if names else "event"
