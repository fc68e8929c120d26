"""Where it settles, and whether it settles at all.

    one closed group of period 1            unique_limit: every start ends in the same mix, pi P = pi
    the same with seasons                   unique_cycle: one mix for each place in the year
    several, or a group beside exits        depends_on_start: a limit, but one for each start
    a periodic group                        no_limit: the mix cycles; only a time average exists
    only exits                              exits_only: everybody leaves; ask for the mix of those remaining

Source: Kemeny & Snell (1960), Finite Markov Chains; Darroch & Seneta (1965) J. Appl. Prob. 2 (remaining);
Bartholomew (1982), Stochastic Models for Social Processes, ch. 3 (a base with joiners).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.delta import doubt_of, quantiles
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.longrun_delta import delta_limits
from cohortflow.projector.longrun_figures import figures
from cohortflow.projector.prospect import Figure, Prospect
from cohortflow.projector.unroll import drawn_schedule
from cohortflow.record import Record

DRAWS = 200
Key = tuple[str, str, str, str]


@dataclass(frozen=True, repr=False, eq=False)
class LongRun(Record):
    """The long run of a model.

    verdict : unique_limit | unique_cycle | depends_on_start | no_limit | exits_only | not_identified
    reasons : codes: "closed_group:a+b", "periodic_group:a+b", "several_groups", "exits_reachable",
        "rows_without_data:x"
    figures : the rows;  limits : key of a figure -> (low, high);  method : delta | draws | none
    """

    schedule: Schedule
    verdict: str
    reasons: tuple[str, ...]
    figures: tuple[Figure, ...]
    limits: Mapping[Key, tuple[float, float]]
    level: float
    method: str
    segment: str = "all"
    kind: ClassVar[str] = "long_run"

    def value(self, measure: str, state: str = "", origin: str = "") -> float:
        """One figure; NaN when there is none. With seasons: the average over the year's places."""
        found = [f.value for f in self.figures if (f.measure, f.state, f.origin) == (measure, state, origin)]
        return float(np.mean(found)) if found else float("nan")

    def to_frame(self) -> pd.DataFrame:
        """segment, measure, state, from, value, low, high, note."""
        nothing = (float("nan"), float("nan"))
        rows = [
            (self.segment, f.measure, f.state, f.origin, f.value, *self.limits.get(f.key, nothing), f.note)
            for f in self.figures
        ]
        return pd.DataFrame(
            rows, columns=["segment", "measure", "state", "from", "value", "low", "high", "note"]
        )

    def headline(self) -> str:
        size = len(self.schedule.states)
        return f"long run of {size} states per {self.schedule.calendar.kind}: {self.verdict}"

    def about(self) -> Mapping[str, Any]:
        return {
            "verdict": self.verdict,
            "reasons": list(self.reasons),
            "level": self.level,
            "method": self.method,
        }


def long_run(
    model: Any,
    *,
    start: Any = None,
    joiners: Any = None,
    level: float = 0.90,
    covariance: Any = None,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    base_period: str | int | None = None,
    segment: str = "all",
) -> LongRun:
    """Where a chain, or a base with constant joiners, settles; the mix of those who remain; how fast.

    Parameters
    ----------
    model : a Fit, Chain or Schedule
    start : customers by state; limits are then given from "start" as well as from each state
    joiners : Joiners (their average of the last year) or numbers a period by state, joining for ever
    level, covariance, draws, rng : of the intervals: delta method for one chain, else quantiles over draws

    >>> from cohortflow import Chain, States
    >>> oz = Chain(States(["rain", "nice", "snow"]), [[0.5, 0.25, 0.25], [0.5, 0, 0.5], [0.25, 0.25, 0.5]])
    >>> settled = long_run(oz)
    >>> settled.verdict, round(settled.value("stationary_share", "nice", "group 1"), 6)
    ('unique_limit', 0.2)
    """
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "The long run")
    base = accept.base_period(model, start, base_period, schedule.calendar)
    coming, rate_error = _constant(joiners, schedule)

    def seen(part: Schedule) -> Prospect:
        calendar = schedule.calendar
        position = (
            (lambda k: f"step:{k}")
            if base is None
            else (lambda k: f"position:{calendar.position(base + k) + 1}")
        )
        return Prospect(part, _starts(schedule, start), coming, accept.first_step(schedule, base), position)

    prospect = seen(schedule)
    rows = tuple(figures(prospect))
    doubt = doubt_of(model, covariance, draws, rng, level)
    limits: Mapping[Key, tuple[float, float]] = {}
    if doubt.spread is not None:
        limits = delta_limits(prospect, doubt.spread, rate_error)
    elif doubt.draws is not None:
        each = (seen(drawn_schedule(doubt.draws, d)) for d in range(doubt.draws.size))
        limits = _by_draws(rows, [{f.key: f.value for f in figures(one)} for one in each], level)
    fixed = ("closed_group", "group_period")
    kept = {key: pair for key, pair in limits.items() if key[0] not in fixed}
    return LongRun(schedule, prospect.verdict, _reasons(prospect), rows, kept, level, doubt.method, segment)


def _by_draws(
    rows: tuple[Figure, ...], samples: list[dict[Key, float]], level: float
) -> dict[Key, tuple[float, float]]:
    out = {}
    for row in rows:
        values = np.array([s.get(row.key, np.nan) for s in samples])
        low, high = quantiles(values[:, None], level)
        out[row.key] = (float(low[0]), float(high[0]))
    return out


def _starts(schedule: Schedule, start: Any) -> dict[str, Array]:
    states = schedule.states
    out = {name: np.eye(len(states))[states.index(name)] for name in states.remaining}
    if start is not None:
        counts = accept.opening(None, start, states)
        if counts.sum() <= 0:
            raise CallError(
                "start adds up to 0 customers; leave it out, and limits are given from each state."
            )
        out["start"] = counts / counts.sum()
    return out


def _constant(joiners: Any, schedule: Schedule) -> tuple[Array | None, float]:
    """(K,) joiners a period and the relative variance of their rate."""
    if joiners is None:
        return None, 0.0
    if not isinstance(joiners, Joiners):
        return accept.as_counts(joiners, schedule.states, name="joiners"), 0.0
    return joiners.a_period(), joiners.relative_error()


def _reasons(at: Prospect) -> tuple[str, ...]:
    names = at.schedule.states.names
    out = []
    for group, period in at.groups:
        members = "+".join(names[m] for m in sorted({int(at.chain.report[s]) for s in group}))
        out.append(f"{'periodic_group' if period > 1 else 'closed_group'}:{members}")
    if len(at.groups) > 1:
        out.append("several_groups")
    if at.exits_reached:
        out.append("exits_reachable")
    return (*out, *(f"rows_without_data:{s}" for s in at.schedule.unknown))
