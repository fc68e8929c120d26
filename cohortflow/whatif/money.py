"""How money is counted, as the functions of this room take it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from cohortflow.chain import Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.projector.money import Terms, money_terms
from cohortflow.projector.value import Value

KEYWORDS = ("per_period", "on_move", "discount_rate", "timing", "first_period_discounted", "currency")


@dataclass(frozen=True, eq=False)
class Money:
    """Terms (None: no money), and the currency's name."""

    terms: Terms | None = None
    currency: str = ""


def as_money(value: Any, schedule: Schedule) -> Money:
    """Money from a Value, from Terms, or from a mapping with the keywords of `cf.value`; None: no money.

    >>> from cohortflow import Chain, States
    >>> chain = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    >>> as_money({"per_period": {"here": 5}, "timing": "end"}, chain.schedule).terms.lag
    1.0
    """
    if value is None or isinstance(value, Money):
        return value or Money()
    if isinstance(value, Value):
        return Money(value.terms, value.currency)
    if isinstance(value, Terms):
        return Money(value)
    if not isinstance(value, Mapping):
        raise CallError(
            f"value is a Value, or a mapping with the keywords of cf.value; got {type(value).__name__}."
        )
    for name in value:
        if name not in KEYWORDS:
            raise CallError(
                f'value takes no "{name}"{nearest(name, KEYWORDS)}. Keywords: {listed(KEYWORDS)}.'
            )
    given = dict(value)
    currency = str(given.pop("currency", ""))
    if "per_period" not in given:
        raise CallError('value needs "per_period": the contribution a customer a period by state.')
    per_year = schedule.calendar.per_year
    return Money(
        money_terms(schedule.states, given.pop("per_period"), periods_a_year=per_year, **given), currency
    )
