"""How forecasts made in the past came out, and which model that speaks for."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from cohortflow.report.chart.backtest import backtest_chart
from cohortflow.report.content import Exhibit, Facts, Section, bound
from cohortflow.report.rounding import count, unit
from cohortflow.report.trust import choice_sentence, scores_table, validated_sentence


@dataclass(frozen=True)
class Trust:
    """A run's Backtest and Choice, and what the plain chain expects where another model was fitted.

    plain : (H+1,) live customers
    """

    tested: Any = None
    choice: Any = None
    plain: np.ndarray | None = None


def past_section(facts: Facts, trust: Trust) -> tuple[Section, ...]:
    """The section on past forecasts; none when no backtest was asked for."""
    title, why = "How past forecasts came out", facts.absent.get("backtest")
    if trust.tested is None:
        return (Section("past", title, (f"This part is absent: {why}",)),) if why else ()
    lead = [validated_sentence(trust.tested, facts.model, kind=facts.kind)]
    if trust.choice is not None:
        lead.append(choice_sentence(trust.choice))
    chart = bound(backtest_chart, trust.tested, facts.model, kind=facts.kind)
    exhibit = Exhibit("backtest", chart, scores_table(trust.tested, models=(facts.model, "plain")))
    return (Section("past", title, tuple(lead), (exhibit,)),)


def standing(facts: Facts, trust: Trust) -> tuple[str, ...]:
    """What to say beside the first figures: how far they are validated, why this model."""
    if trust.tested is None:
        return ("Not validated: the forecast has not been tested against past forecasts.",)
    out = [validated_sentence(trust.tested, facts.model, kind=facts.kind, quantity=facts.main)]
    return (*out, choice_sentence(trust.choice)) if trust.choice is not None else tuple(out)


def parting(facts: Facts, plain: np.ndarray, chosen: np.ndarray, half_width: np.ndarray) -> str:
    """From where on the plain chain and the fitted model differ by more than half the band's half-width.

    plain, chosen, half_width : (H+1,) of live customers

    >>> import cohortflow as cf
    >>> facts = Facts("", cf.States(["on", "off"], exits=["off"]), cf.Calendar("month"), 0.9, 2, model="tenure")
    >>> parting(facts, np.array([100, 96, 90.0]), np.array([100, 95, 80.0]), np.array([0, 10, 10.0]))
    'At the horizon the plain chain expects 90 live customers, the model tenure 80; they part after 2 months.'
    """
    apart = np.flatnonzero(np.abs(plain - chosen)[1:] > 0.5 * half_width[1:]) + 1
    first = int(apart[0]) if len(apart) else 0
    where = f"they part after {first} {unit(facts.kind, first)}" if first else "within the band they do not part"
    return (
        f"At the horizon the plain chain expects {count(plain[-1])} live customers, the model {facts.model} "
        f"{count(chosen[-1])}; {where}."
    )
