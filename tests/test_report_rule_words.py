"""Rules of states in plain words."""

import pytest

from cohortflow.report.rule_words import condition_in_words, rule_in_words
from cohortflow.study import Condition, StateRule


@pytest.mark.parametrize(
    ("condition", "words"),
    [
        (
            Condition("last_event", ("a", "b"), ("a", "b", "c")),
            'the latest of "a", "b" and "c" is "a" or "b"',
        ),
        (Condition("silent_for", ("a",), k=1), 'no "a" for 1 month'),
        (
            Condition("at_most", ("a", "b"), k=2, n=0),
            'at most 0 "a" or "b" within 2 months, and there for that long',
        ),
        (Condition("spent_at_least", k=3, amount=20.0), "20 or more spent within 3 months"),
        (Condition("tenure_below", k=1), "joined in this month"),
        (Condition("expired_for", k=0), "paid-up date passed"),
        (Condition("expired_for", k=2), "paid-up date passed 2 months ago or more"),
        (Condition("due_within", k=1), "paid-up date within the next 1 month"),
    ],
)
def test_each_condition_is_said(condition, words):
    assert condition_in_words(condition, "month") == words


def test_alternatives_and_conditions_are_joined():
    silent, due = Condition("silent_for", ("a",), k=2), Condition("due_within", k=1)
    rule = StateRule("x", "live", ((silent, due), (silent,)))
    assert rule_in_words(rule, "week") == (
        'no "a" for 2 weeks and paid-up date within the next 1 week; or no "a" for 2 weeks'
    )
