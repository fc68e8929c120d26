"""Rules in plain words."""

import pytest

from cohortflow.report.rules import rule_words
from cohortflow.study import Condition, StateRule
from cohortflow.study.parts import CONDITIONS


@pytest.mark.parametrize(
    "condition, words",
    [
        (
            Condition("last_event", ("cancelled",), ("joined", "cancelled")),
            "the latest of joined and cancelled is cancelled",
        ),
        (Condition("silent_for", ("bought",), k=1), "no bought in the month (a new stay is given that time)"),
        (
            Condition("silent_for", ("a", "b"), k=3),
            "no a or b in the last 3 months (a new stay is given that time)",
        ),
        (Condition("at_least", ("bought",), k=1, n=3), "3 or more bought in the month"),
        (
            Condition("at_most", ("bought",), k=6, n=1),
            "at most 1 bought in the last 6 months, and the stay is older",
        ),
        (Condition("spent_at_least", k=2, amount=50), "spent 50.00 or more in the last 2 months"),
        (Condition("tenure_below", k=1), "joined in this month"),
        (Condition("tenure_below", k=3), "joined in this month or the 2 before"),
        (Condition("expired_for", k=0), "paid-up-to date has passed"),
        (Condition("expired_for", k=2), "paid-up-to date passed 2 or more whole months ago"),
        (Condition("due_within", k=1), "paid-up-to date falls in the next month"),
        (Condition("due_within", k=2), "paid-up-to date falls in the next 2 months"),
    ],
)
def test_conditions(condition, words):
    assert rule_words(StateRule("x", when=((condition,),)), "month") == words


def test_every_condition_has_words():
    assert all(rule_words(StateRule("x", when=((Condition(kind, k=1),),))) for kind in CONDITIONS)


def test_and_joins_inside_or_between():
    one, two = Condition("tenure_below", k=1), Condition("expired_for", k=0)
    text = rule_words(StateRule("x", when=((one, two), (two,))), "week")
    assert text == "joined in this week, and paid-up-to date has passed; or paid-up-to date has passed"


def test_event_names_are_cleaned():
    assert "\u202e" not in rule_words(StateRule("x", when=((Condition("silent_for", ("a\u202eb",), k=1),),)))
