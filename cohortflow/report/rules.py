"""The rules of a study in plain words, for the page of what was counted."""

from __future__ import annotations

from typing import Any

from cohortflow.report.rounding import decimal
from cohortflow.report.text import label, listing


def rule_words(rule: Any) -> str:
    """A StateRule as a sentence without its subject; "everybody else" when it has no condition.

    >>> from cohortflow.study import Condition, StateRule
    >>> silent = Condition("silent_for", ("delivered",), k=2)
    >>> rule_words(StateRule("quiet", "live", ((silent,),)))
    'no delivered in the last 2 periods, though there was one before or the stay is older'
    >>> rule_words(StateRule("rest"))
    'everybody else'
    """
    if not rule.when:
        return "everybody else"
    return "; or ".join(", and ".join(condition_words(c) for c in group) for group in rule.when)


def condition_words(condition: Any) -> str:
    """One condition in words."""
    events = _or([label(e) for e in condition.events])
    last = _periods(condition.k)
    words = {
        "last_event": f"the latest of {listing([label(e) for e in condition.among])} is {events}",
        "silent_for": f"no {events} in the {last}, though there was one before or the stay is older",
        "at_least": f"{condition.n} or more {events} in the {last}",
        "at_most": f"at most {condition.n} {events} in the {last}, and the stay is older",
        "spent_at_least": f"spent {decimal(condition.amount, 2)} or more in the {last}",
        "tenure_below": f"joined less than {condition.k} {'period' if condition.k == 1 else 'periods'} ago",
        "expired_for": f"paid-up-to date passed {condition.k} or more whole periods ago",
        "due_within": f"paid-up-to date falls in the next {condition.k} {'period' if condition.k == 1 else 'periods'}",
    }
    return words[condition.kind]


def _or(names: list[str]) -> str:
    return " or ".join(names) if names else "event"


def _periods(k: int) -> str:
    return "period" if k == 1 else f"last {k} periods"
