r"""How large an experiment must be, and how long it runs, to see a lever of a given size.

Departures of the move's state are what is counted. With p_0 the rate now and p_1 the rate under the change, n
departures an arm give the two-sided test of p_1 - p_0 the power asked for (normal approximation,
statsmodels); customers who are seen several times count less: n is multiplied by the design effect of the
move. The expected customers in the state, period by period, tell how many periods that takes.
Source: Fleiss, Levin & Paik (2003), Statistical Methods for Rates and Proportions, ch. 4.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.optimize import brentq

from cohortflow.chain import Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.covariance import design_effects
from cohortflow.projector import accept
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.mix import step_counts
from cohortflow.projector.project import as_joiners
from cohortflow.record import Record
from cohortflow.states import ALL_LIVE
from cohortflow.whatif.change import Change, changed

MOST = 1e9
PERIODS = 60


@dataclass(frozen=True, repr=False, eq=False)
class TrialSize(Record):
    """What an experiment on one move needs.

    rate, rate_under : of the move now, and under the change;  design_effect : of repeated looks at a customer
    departures : in the treated arm; the control needs departures x (1 - share) / share
    periods : from the base on until both arms have them; inf: not within the periods looked at
    at_risk : expected customers in the state at the start of each period, both arms together
    """

    change: Change
    rate: float
    rate_under: float
    power: float
    level: float
    share: float
    design_effect: float
    departures: float
    periods: float
    at_risk: tuple[float, ...]
    kind: ClassVar[str] = "trial_size"

    def to_frame(self) -> pd.DataFrame:
        """from, to, rate, rate_under, power, level, share, design_effect, departures, departures_control,
        periods.
        """
        kept = ("rate", "rate_under", "power", "level", "share", "design_effect", "departures")
        row = {"from": self.change.from_, "to": self.change.to} | {name: getattr(self, name) for name in kept}
        row |= {
            "departures_control": self.departures * (1 - self.share) / self.share,
            "periods": self.periods,
        }
        return pd.DataFrame([row])

    def headline(self) -> str:
        how_long = (
            f"{self.periods:,.0f} periods" if math.isfinite(self.periods) else "longer than looked ahead"
        )
        return (
            f'"{self.change.from_}" to "{self.change.to}" {self.rate:.4g} -> {self.rate_under:.4g}: '
            f"{math.ceil(self.departures):,} departures in the treated arm, {how_long}"
        )

    def about(self) -> Mapping[str, Any]:
        return {"power": self.power, "level": self.level, "share": self.share}


def trial_size(
    model: Any,
    change: Change,
    *,
    power: float = 0.8,
    level: float = 0.95,
    share: float = 0.5,
    design_effect: float | None = None,
    start: Any = None,
    joiners: Any = None,
    periods: int = PERIODS,
    base_period: str | int | None = None,
) -> TrialSize:
    """Departures and periods that an experiment needs to see a change of one move.

    Parameters
    ----------
    model : a Fit or Chain of the plain model;  change : the change to be seen, from one state
    power : chance to see it;  level : of the two-sided test;  share : of the customers in the treated arm
    design_effect : default that of the Fit's move; 1 for a bare Chain
    start, joiners, base_period : as for `project`;  periods : how far to look ahead

    >>> from cohortflow import Chain, States
    >>> states = States(["quiet", "weekly", "left"], exits=["left"])
    >>> chain = Chain(states, [[0.68, 0.12, 0.2], [0.1, 0.9, 0], [0, 0, 1]])
    >>> need = trial_size(chain, Change("quiet", "weekly", add=0.05), start={"quiet": 400, "weekly": 2000})
    >>> need
    <"quiet" to "weekly" 0.12 -> 0.17: 778 departures in the treated arm, 4 periods>
    """
    for name, number in (("power", power), ("level", level), ("share", share)):
        if not 0 < number < 1:
            raise CallError(f"{name} is {number!r}; it must lie strictly between 0 and 1.")
    schedule = accept.as_schedule(model)
    states = schedule.states
    if change.from_ == ALL_LIVE:
        raise CallError("A trial is planned for one move; name the state that it starts from, not all_live.")
    i, j = states.index(change.from_), states.index(change.to)
    rate = float(schedule.chain.matrix[i, j])
    under = float(changed(schedule, change).chain.matrix[i, j])
    if under == rate:
        raise CallError(
            f'The change of "{change.from_}" to "{change.to}" changes nothing, so there is nothing to see.'
        )
    effect = _effect(model, i, j) if design_effect is None else float(design_effect)
    n = effect * departures_needed(rate, under, power=power, level=level, ratio=(1 - share) / share)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    inflow = _arriving(joiners, schedule, base, accept.as_periods(periods))
    counts = accept.opening(model, start, states)
    ahead = step_counts(schedule, counts, periods, inflow)[:-1, i]
    seen = np.cumsum(ahead) * share
    long = float(np.argmax(seen >= n) + 1) if (seen >= n).any() else math.inf
    return TrialSize(change, rate, under, power, level, share, effect, n, long, tuple(ahead.tolist()))


def departures_needed(rate: float, under: float, *, power: float, level: float, ratio: float = 1.0) -> float:
    """Departures in the treated arm, the control having `ratio` times as many, for a two-sided test.

    >>> round(departures_needed(0.12, 0.17, power=0.8, level=0.95))
    777
    """
    from statsmodels.stats.proportion import power_proportions_2indep

    def short(size: float) -> float:
        reached = power_proportions_2indep(
            under - rate, rate, math.exp(size), ratio, 1 - level, return_results=False
        )
        return float(reached) - power

    if short(math.log(MOST)) < 0:
        raise NotIdentified(
            f"A change from {rate:g} to {under:g} is too small to be seen with {MOST:g} departures an arm."
        )
    return math.exp(brentq(short, math.log(2.0), math.log(MOST))) if short(math.log(2.0)) < 0 else 2.0


def _arriving(joiners: Any, schedule: Schedule, base: int | None, periods: int) -> NDArray[np.float64]:
    """(H, K) joiners; after the end of a forecast of joiners their average goes on."""
    if not isinstance(joiners, Joiners) or joiners.periods >= periods:
        return as_joiners(joiners, schedule, base, periods).expected()
    known = as_joiners(joiners, schedule, base, joiners.periods).expected()
    return np.vstack([known, np.tile(joiners.a_period(), (periods - len(known), 1))])


def _effect(model: Any, i: int, j: int) -> float:
    """Design effect of a move of a Fit, at least 1; 1 where counts do not tell customers apart."""
    if not hasattr(model, "rates") or model.best_covariance != "customer":
        return 1.0
    found = design_effects(model.rates, model.covariance("customer"))[i, j]
    return max(1.0, float(found)) if np.isfinite(found) else 1.0
