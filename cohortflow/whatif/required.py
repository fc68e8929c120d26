"""The smallest change of a lever that reaches a target; or how far it goes, when it does not reach it.

The target is followed along the lever, from nothing to all that the rows can give in either direction, and
solved between the first two sizes that have it between them (Brent). "net" asks for the summed value less the
costs of the change; its natural mark is 0: the smallest change that pays.
Source: Brent (1973), Algorithms for Minimization without Derivatives, ch. 4.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.optimize import brentq

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector import accept
from cohortflow.projector.delta import quantiles
from cohortflow.projector.project import as_joiners
from cohortflow.projector.unroll import drawn_schedule
from cohortflow.record import Record
from cohortflow.whatif.change import PROPORTIONAL, Change, feasible
from cohortflow.whatif.course import Course
from cohortflow.whatif.money import as_money
from cohortflow.whatif.paths import walk_paths
from cohortflow.whatif.scenario import Scenario
from cohortflow.whatif.setting import Setting
from cohortflow.whatif.slopes import slopes
from cohortflow.whatif.target import Target, resolve

Array = NDArray[np.float64]
Figure = Callable[[Schedule, float], float]

DRAWS = 200
SIZES, COARSE = 24, 6
JUST_SHORT = 1e-9
AT_HORIZON = ("base", "value")


@dataclass(frozen=True, repr=False, eq=False)
class Required(Record):
    """What a lever must do for a target.

    add : points of probability, NaN when it cannot be reached;  low, high : over draws (inf where one cannot)
    now : the target as it stands;  reach : the mark;  most, most_at : the nearest it gets, and with which
        size
    chance : share of draws in which the mark can be reached (NaN without draws);  probability : of the move
        now
    """

    lever: Change
    target: str
    horizon: int | None
    now: float
    reach: float
    add: float
    low: float
    high: float
    most: float
    most_at: float
    chance: float
    probability: float
    level: float
    segment: str = "all"
    kind: ClassVar[str] = "required_change"

    @property
    def reached(self) -> bool:
        """Whether the lever can reach the mark."""
        return bool(np.isfinite(self.add))

    def to_frame(self) -> pd.DataFrame:
        """segment, from, to, target, now, reach, reached, probability, add, low, high, most, most_at,
        chance.
        """
        row = {
            "segment": self.segment, "from": self.lever.from_, "to": self.lever.to, "target": self.target,
            "now": self.now, "reach": self.reach, "reached": self.reached, "probability": self.probability,
            "add": self.add, "low": self.low, "high": self.high, "most": self.most, "most_at": self.most_at,
            "chance": self.chance,
        }  # fmt: skip
        return pd.DataFrame([row])

    def headline(self) -> str:
        move = f'"{self.lever.from_}" to "{self.lever.to}"'
        if self.reached:
            points = 100 * self.add
            return f"{self.target} {self.now:,.6g} -> {self.reach:,.6g} needs {move} {points:+.4g} points"
        return f"{self.target} cannot be brought to {self.reach:,.6g} by {move}: the most is {self.most:,.6g}"

    def about(self) -> Mapping[str, Any]:
        return {"target": self.target, "horizon": self.horizon, "level": self.level, "reached": self.reached}


def required_change(
    model: Any,
    lever: Change | tuple[str, str],
    *,
    target: str,
    reach: float | None = None,
    horizon: int | None = None,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    balance: str | Iterable[str] = PROPORTIONAL,
    cost_per_customer: float = 0.0,
    fixed_cost: float = 0.0,
    level: float = 0.90,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    covariance: str | None = None,
    base_period: str | int | None = None,
    segment: str = "all",
) -> Required:
    """The smallest change of one lever that brings a target to a mark.

    Parameters
    ----------
    lever : (from, to) with `balance`, or a Change, whose balance and dates hold and whose size does not
        matter
    target : as for `sensitivity`; or "net": value over the horizon less the costs given here
    reach : the mark (for "net": 0 unless given)
    others : as for `sensitivity`

    A lever that cannot reach the mark is a result, not an error: `reached` is False and `most` says how far
    it goes.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> found = required_change(chain, ("steady", "left"), target="life:steady", reach=20)
    >>> round(found.add, 9)  # 1 / 20 = .1 - .05
    -0.05
    """
    change = lever.resized(0.0) if isinstance(lever, Change) else Change(*lever, add=0.0, balance=balance)
    schedule = accept.as_schedule(model)
    generator = accept.as_rng(rng)
    drawn = accept.draws_of(model, draws, generator, covariance)
    accept.as_level(level)
    opened = {
        "horizon": horizon,
        "start": start,
        "joiners": joiners,
        "value": value,
        "base_period": base_period,
    }
    costs: dict[str, Any] = {"cost_per_customer": cost_per_customer, "fixed_cost": fixed_cost}
    if target == "net":
        mark, figure = 0.0 if reach is None else float(reach), _net(model, change, costs, opened)
    elif reach is None or not np.isfinite(reach):
        raise CallError(f'reach is {reach!r}; say which number the target "{target}" is to reach.')
    else:
        mark, figure = float(reach), _of_target(model, target, change, totals, opened)
    found = _solve(lambda s: figure(schedule, s) - mark, feasible(schedule, change))
    name = target if target == "net" else resolve(model, target, totals=totals, **opened).code
    low, high, chance = _scattered(figure, drawn, change, mark, found, level)
    return Required(
        change, name, horizon, found.now + mark, mark, found.size, low, high, found.most + mark,
        found.most_at, chance, _probability(schedule, change), level, segment,
    )  # fmt: skip


def _of_target(
    model: Any,
    name: str,
    change: Change,
    totals: Mapping[str, Sequence[str]] | None,
    opened: Mapping[str, Any],
) -> Figure:
    """The target of a schedule under the change of a given size."""
    aim = resolve(model, name, totals=totals, **opened)
    base = accept.base_period(
        model, opened["start"], opened["base_period"], accept.as_schedule(model).calendar
    )
    dated = change.starts is not None or change.ends is not None
    ahead = aim.measure in AT_HORIZON and aim.horizon is not None and aim.of != "joiners"
    if dated and not ahead and aim.measure in ("life", "value"):
        raise CallError(
            f'A dated change and "{aim.code}" do not go together: leave starts and ends away, or ask for a '
            f"figure "
            "of the base at a horizon."
        )

    def figure(schedule: Schedule, size: float) -> float:
        course = Course.of(schedule, (change.resized(size),), base, aim.first_step)
        return _walked(aim, course) if ahead else slopes(aim, course.later()).value

    return figure


def _walked(aim: Target, course: Course) -> float:
    """The base or the value at the horizon, walked there."""
    size = len(course.schedule.states)
    inflow = (
        aim.inflow[: aim.horizon]
        if aim.measure == "base" or aim.of == "total"
        else np.zeros((aim.horizon or 1, size))
    )
    found = walk_paths(course, aim.start, inflow[..., None], lambda step: aim.money.terms)
    if aim.measure == "base":
        return float(aim.weight @ found.counts[-1, :, 0])
    terms = aim.money.terms
    assert terms is not None
    return float(np.power(terms.factor, np.arange(len(inflow)) + terms.lag) @ found.paid[:, 0])


def _net(model: Any, change: Change, costs: Mapping[str, Any], opened: Mapping[str, Any]) -> Figure:
    """Value over the horizon less the costs, against the model as it stands."""
    if opened["horizon"] is None:
        raise CallError('The target "net" sums over a horizon: pass horizon=, periods ahead.')
    if opened["value"] is None:
        raise CallError('The target "net" is about money: pass value=.')
    own = accept.as_schedule(model)
    base = accept.base_period(model, opened["start"], opened["base_period"], own.calendar)
    given = {
        "start": accept.opening(model, opened["start"], own.states),
        "joiners": as_joiners(opened["joiners"], own, base, accept.as_periods(opened["horizon"])),
        "value": as_money(opened["value"], own),
        "base_period": base,
    }

    def figure(schedule: Schedule, size: float) -> float:
        plan = Scenario("change", (change.resized(size),), **costs, starts=change.starts, ends=change.ends)
        at = Setting.of(schedule, plan, periods=opened["horizon"], **given)
        paths = [
            walk_paths(side.course, at.start, inflow, side.prices)
            for side, inflow in zip(at.sides, at.inflows(), strict=True)
        ]
        gain = paths[1].paid - paths[0].paid - at.costs(paths[1].treated)
        return float((at.discount @ gain)[0])

    return figure


@dataclass(frozen=True)
class _Found:
    """size : smallest one with figure 0, NaN when there is none;  now, most, most_at : of the figure."""

    size: float
    now: float
    most: float
    most_at: float


def _solve(figure: Callable[[float], float], room: tuple[float, float]) -> _Found:
    now = figure(0.0)
    if now == 0:
        return _Found(0.0, now, now, 0.0)
    ways = [_along(figure, now, end) for end in room if end != 0]
    sizes = [w.size for w in ways if np.isfinite(w.size)]
    best = min(ways, key=lambda w: np.sign(now) * w.most, default=_Found(np.nan, now, now, 0.0))
    size = min(sizes, key=abs) if sizes else float("nan")
    return _Found(size, now, best.most, best.most_at)


def _along(figure: Callable[[float], float], now: float, end: float, count: int = SIZES) -> _Found:
    """The first zero on the way from 0 to `end`, and the value that goes farthest towards it or beyond."""
    end = _within(figure, end)
    sizes = [0.0, *(end * np.linspace(0.0, 1.0, count + 1)[1:])]
    values = [now, *(figure(size) for size in sizes[1:])]
    best = int(np.argmin(np.sign(now) * np.array(values)))
    crossed = next((k for k in range(1, len(sizes)) if values[k] * now <= 0), None)
    size = float("nan") if crossed is None else _zero(figure, sizes[crossed - 1], sizes[crossed])
    return _Found(size, now, values[best], float(sizes[best]))


def _within(figure: Callable[[float], float], end: float) -> float:
    """`end`, or just short of it where the figure ceases to exist there (nobody leaves any more)."""
    try:
        figure(end)
    except NotIdentified:
        return end * (1.0 - JUST_SHORT)
    return end


def _zero(figure: Callable[[float], float], first: float, last: float) -> float:
    return float(brentq(figure, first, last, xtol=1e-14, rtol=1e-12))


def _scattered(
    figure: Figure, draws: Draws | None, change: Change, mark: float, found: _Found, level: float
) -> tuple[float, float, float]:
    """Limits of the size over draws, in the direction that the estimate takes, and the chance to reach the
    mark.
    """
    if draws is None:
        return float("nan"), float("nan"), float("nan")
    towards = found.size if np.isfinite(found.size) else found.most_at
    each = (drawn_schedule(draws, d) for d in range(draws.size))
    sizes = np.array([_one_draw(figure, one, change, mark, found.now, towards) for one in each])
    low, high = quantiles(sizes[:, None], level)
    return float(low[0]), float(high[0]), float(np.isfinite(sizes).mean())


def _one_draw(
    figure: Figure, schedule: Schedule, change: Change, mark: float, now: float, towards: float
) -> float:
    try:
        start = figure(schedule, 0.0) - mark
        if start * now <= 0:
            return 0.0
        end = feasible(schedule, change)[0 if towards < 0 else 1]
        end = _within(lambda s: figure(schedule, s) - mark, end) if end else end
        if end and (figure(schedule, end) - mark) * start <= 0:
            return _zero(lambda s: figure(schedule, s) - mark, 0.0, end)
        size = _along(lambda s: figure(schedule, s) - mark, start, end, COARSE).size if end else float("nan")
    except NotIdentified:
        size = float("nan")
    return size if np.isfinite(size) else float(np.copysign(np.inf, towards))


def _probability(schedule: Schedule, change: Change) -> float:
    """Of the move now, where the model has one for it; else NaN."""
    if not schedule.is_plain or change.from_ not in schedule.states.names:
        return float("nan")
    names = schedule.states
    return float(schedule.components[0].matrices[0, names.index(change.from_), names.index(change.to)])
