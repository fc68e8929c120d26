"""Arms of an experiment compared: their moves, retention and value, and what rolling one out would do.

    moves      differences of rates with customer-robust limits; p-values adjusted by Holm's rule over all
    moves
    retention  share of a common opening mix that has not left after h periods, arm by arm; delta method
    value      expected discounted contribution of a customer of that mix; delta method
    roll-out   the base projected as if everybody were in the arm, less as if everybody were in the control;
    draws

Arms are set when a customer is first seen, and only moves since the experiment began count. What is compared
is those who were drawn into an arm, whatever they then did.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from cohortflow.chain import Chain, Draws, Schedule
from cohortflow.errors import NotIdentified, listed
from cohortflow.estimator.draws import draw_rows
from cohortflow.markov.derivative import mix_derivative
from cohortflow.markov.gradient import Derivative
from cohortflow.markov.structure import leads_to
from cohortflow.projector import accept
from cohortflow.projector.mix import filled
from cohortflow.projector.money import value_derivative
from cohortflow.projector.project import as_joiners
from cohortflow.record import Record
from cohortflow.tally import Tally
from cohortflow.whatif.arm_rows import ArmRows, arm_rows, choose_arms, holm, move_differences
from cohortflow.whatif.compare import Pair
from cohortflow.whatif.course import Course
from cohortflow.whatif.money import Money, as_money
from cohortflow.whatif.paths import Paths, walk_paths

Array = NDArray[np.float64]

DRAWS = 2000
COLUMNS = [
    "measure", "arm", "against", "quantity", "from", "to", "periods_ahead", "control", "treated",
    "difference", "low", "high", "p_value", "p_adjusted", "n_control", "n_arm",
]  # fmt: skip


@dataclass(frozen=True, repr=False, eq=False)
class Arms(Record):
    """The comparison of one or more arms with a control.

    rows : the rates of all arms with their joint covariance;  table : see `to_frame`
    tests : number of moves over which p-values were adjusted;  notes : codes, for instance
        "pooled_row:taster"
    """

    column: str
    rows: ArmRows
    table: pd.DataFrame
    starts: int | None
    horizon: int
    level: float
    tests: int
    notes: tuple[str, ...]
    kind: ClassVar[str] = "arms"

    def to_frame(self) -> pd.DataFrame:
        """measure, arm, against, quantity, from, to, periods_ahead, control, treated, difference, low, high,
        ...

        measure: move | retention | value | rollout; p_adjusted: Holm's over all moves compared (for retention
        at the horizon and value: over the arms). n: departures seen.
        """
        return self.table.copy()

    def of(self, measure: str, **where: Any) -> pd.DataFrame:
        """The rows of one measure, cut further by column values."""
        found = self.table[self.table["measure"] == measure]
        for column, value in where.items():
            found = found[found[column.rstrip("_")] == value]
        return found.reset_index(drop=True)

    def headline(self) -> str:
        moves = self.of("move")
        clear = int((moves["p_adjusted"] < 1 - self.level).sum())
        arms = ", ".join(f'"{a}"' for a in self.rows.arms[1:])
        return (
            f'arms {arms} against "{self.rows.arms[0]}": {clear} of {self.tests} moves differ '
            f"({self.level:.0%}, adjusted by Holm's rule)"
        )

    def about(self) -> Mapping[str, Any]:
        return {
            "column": self.column,
            "control": self.rows.arms[0],
            "arms": list(self.rows.arms[1:]),
            "treated": list(self.rows.treated),
            "horizon": self.horizon,
            "level": self.level,
            "tests": self.tests,
            "covariance": self.rows.cov.covariance_kind,
            "notes": list(self.notes),
        }


def compare_arms(
    tally: Tally,
    *,
    control: str,
    column: str | None = None,
    arms: Sequence[str] | None = None,
    starts: str | int | None = None,
    treated: Sequence[str] | None = None,
    horizon: int = 12,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    level: float = 0.95,
    covariance: str | None = None,
    draws: int = DRAWS,
    rng: int | np.random.Generator = 1,
) -> Arms:
    """Compare the arms of an experiment that the tally holds as a segment column.

    Parameters
    ----------
    control : the arm that the others are compared with;  arms : default all others that customers were drawn
        into
    column : the arm column; default the one declared as such
    starts : first period of the experiment (label or ordinal): moves into earlier periods do not count
    treated : states in which the arms may differ; elsewhere everybody's rates hold for all. Default: all
        states
    horizon : periods, of retention, value and roll-out;  start : opening counts, default the last mix of the
        tally
    joiners : for the roll-out, as for `project`;  value : how money is counted, as for `what_if`
    level : of limits;  covariance : "customer" (default) or "two_way"

    CallError for unknown columns, arms or states; NotIdentified when the arms share no state with departures.

    >>> import cohortflow as cf
    >>> states = cf.States(["here", "gone"], exits=["gone"])
    >>> rows = [(f"{arm}{i}", t, "gone" if t == 2 and i % k == 0 else "here", arm)
    ...         for arm, k in (("a", 5), ("b", 2)) for i in range(40) for t in (1, 2)]
    >>> panel = pd.DataFrame(rows, columns=["customer", "period", "state", "arm"])
    >>> history = cf.read_history(panel, states, segments=["arm"])
    >>> found = compare_arms(cf.count(history), column="arm", control="a", horizon=1)
    >>> found.of("move", to="gone")[["control", "treated", "difference"]].round(3).values.tolist()
    [[0.2, 0.5, 0.3]]
    """
    name, chosen = choose_arms(tally, column, control, arms)
    begins = None if starts is None else tally.period(starts)
    wanted = tally.states.remaining if treated is None else tuple(treated)
    kind = covariance or "customer"
    rows = arm_rows(tally, name, chosen, starts=begins, treated=wanted, kind=kind)
    quantile = _quantile(rows.cov.df, accept.as_level(level))
    asked = _Asked(tally, rows, accept.as_periods(horizon), quantile, level)
    counts = accept.opening(None, tally.mix() if start is None else start, tally.states)
    money = as_money(value, Chain(tally.states, np.eye(len(tally.states)), period=tally.calendar).schedule)
    asked.refuse_unknown(counts, joiners)
    frames = [asked.moves(), asked.retention(counts / counts.sum())]
    if money.terms is not None:
        frames.append(asked.value(counts / counts.sum(), money))
    frames.append(asked.rollout(counts, joiners, money, draws, accept.as_rng(rng)))
    table = pd.concat(frames, ignore_index=True).reindex(columns=COLUMNS)
    tests = int(frames[0]["p_value"].notna().sum())
    return Arms(name, rows, table, begins, horizon, level, tests, rows.notes)


@dataclass(frozen=True, eq=False)
class _Asked:
    """One comparison's frames; `rates` (R, K) are the estimates."""

    tally: Tally
    rows: ArmRows
    horizon: int
    quantile: float
    level: float

    @property
    def others(self) -> tuple[str, ...]:
        return self.rows.arms[1:]

    def refuse_unknown(self, counts: Array, joiners: Any) -> None:
        """NotIdentified when those there or joining can get to a state without any departures."""
        coming = as_joiners(joiners, self._schedule(self._pair(self.others[0])[0]), None, 1).expected()[0]
        for arm in self.rows.arms:
            matrix = self.rows.matrices(self.rows.counts.P, arm)
            unknown = np.flatnonzero(np.isnan(matrix).any(axis=1))
            reach = (
                leads_to(np.nan_to_num(matrix) > 0, unknown.tolist())
                if len(unknown)
                else np.zeros(len(counts), bool)
            )
            if reach[(counts > 0) | (coming > 0)].any():
                names = [self.rows.states.names[k] for k in unknown]
                raise NotIdentified(
                    f"What follows from the arms passes through {listed(names)}, and no departure from "
                    f"there was counted "
                    "since the experiment began. Give start= and joiners= that do not get there, or wait."
                )

    def moves(self) -> pd.DataFrame:
        frames = [
            move_differences(self.rows, arm, quantile=self.quantile).assign(
                arm=arm, against=self.rows.arms[0]
            )
            for arm in self.others
        ]
        out = pd.concat(frames, ignore_index=True).assign(measure="move", quantity="probability")
        return out.assign(p_adjusted=holm(out["p_value"].to_numpy()))

    def retention(self, law: Array) -> pd.DataFrame:
        """Share of the law that has not left after 1 .. H periods."""
        kept = (~self.rows.states.exit_mask).astype(float)[:, None]
        out = []
        for h in range(1, self.horizon + 1):
            for arm in self.others:
                pair = [
                    self._derived(mix_derivative(P, law, steps=h, weights=kept), None)
                    for P in self._pair(arm)
                ]
                out.append(self._row("retention", arm, pair) | {"periods_ahead": h, "quantity": "retained"})
        frame = pd.DataFrame(out)
        last = (frame["periods_ahead"] == self.horizon).to_numpy()
        return frame.assign(p_adjusted=holm(np.where(last, frame["p_value"], np.nan)))

    def value(self, law: Array, money: Money) -> pd.DataFrame:
        """Discounted contribution of a customer of the law over the horizon."""
        assert money.terms is not None
        out = []
        for arm in self.others:
            slopes = [value_derivative(P, money.terms, horizon=self.horizon) for P in self._pair(arm)]
            pair = [self._derived(slope, law) for slope in slopes]
            out.append(
                self._row("value", arm, pair) | {"periods_ahead": self.horizon, "quantity": "customer_value"}
            )
        frame = pd.DataFrame(out)
        return frame.assign(p_adjusted=holm(frame["p_value"].to_numpy()))

    def rollout(
        self, counts: Array, joiners: Any, money: Money, size: int, rng: np.random.Generator
    ) -> pd.DataFrame:
        """Everybody in the arm against everybody in the control, period by period."""
        drawn = draw_rows(self.rows.counts, self.rows.cov, size, rng=rng)
        frames = [self._rolled(arm, counts, joiners, money, drawn) for arm in self.others]
        return pd.concat(frames, ignore_index=True)

    # ---- inner ----
    def _pair(self, arm: str) -> tuple[Array, Array]:
        """Matrices of the control and of the arm."""
        rates = self.rows.counts.P
        first, second = (filled(self.rows.matrices(rates, a)) for a in (self.rows.arms[0], arm))
        return first, second

    def _schedule(self, matrix: Array) -> Schedule:
        return Chain(self.rows.states, matrix, period=self.tally.calendar).schedule

    def _derived(self, slope: Derivative, weights: Array | None) -> tuple[float, Array]:
        """(value, gradient) of a weighted sum of targets, or of the first."""
        if weights is None:
            return float(slope.value[0]), slope.gradient(0)
        there = weights != 0
        return float(weights[there] @ slope.value[there]), slope.along(weights)

    def _row(self, measure: str, arm: str, pair: list[tuple[float, Array]]) -> dict[str, Any]:
        (base, slope_c), (new, slope_a) = pair
        gradient = self.rows.spread(slope_a, arm) - self.rows.spread(slope_c, self.rows.arms[0])
        flat = gradient.ravel()
        variance = float(flat @ np.nan_to_num(self.rows.cov.matrix) @ flat)
        error = math.sqrt(max(variance, 0.0))
        d = new - base
        return {
            "measure": measure, "arm": arm, "against": self.rows.arms[0], "control": base, "treated": new,
            "difference": d, "low": d - self.quantile * error, "high": d + self.quantile * error,
            "p_value": 2 * _tail(abs(d) / error, self.rows.cov.df) if error > 0 else np.nan,
        }  # fmt: skip

    def _rolled(self, arm: str, counts: Array, joiners: Any, money: Money, drawn: Array) -> pd.DataFrame:
        states = self.rows.states
        paths: list[Paths] = []
        scattered: list[Paths] = []
        for which, matrix in zip((self.rows.arms[0], arm), self._pair(arm), strict=True):
            schedule = self._schedule(matrix)
            draws = Draws.of_matrices(schedule, [filled(self.rows.matrices(drawn, which))[:, None]])
            inflow = as_joiners(joiners, schedule, self.tally.meta.last, self.horizon).expected()[..., None]
            course = Course.of(schedule, (), None, 0)
            for kept, source in ((paths, None), (scattered, draws)):
                kept.append(walk_paths(course, counts, inflow, lambda step: money.terms, draws=source))
        figures = {"all_live": states.live_mask.astype(float)}
        figures |= {name: np.eye(len(states))[states.index(name)] for name in states.exits}
        sides = {name: ([w @ p.counts[1:] for p in paths], [w @ p.counts[1:] for p in scattered])
                 for name, w in figures.items()}  # fmt: skip
        if money.terms is not None:
            factor = np.power(money.terms.factor, np.arange(self.horizon) + money.terms.lag)[:, None]
            sides["value"] = ([factor * p.paid for p in paths], [factor * p.paid for p in scattered])
        pairs = {
            name: Pair(two[0][:, 0], two[1][:, 0], partial(np.subtract, many[1], many[0]), self.level)
            for name, (two, many) in sides.items()
        }
        frames = [
            pd.DataFrame({
                "measure": "rollout", "arm": arm, "against": self.rows.arms[0], "quantity": name,
                "periods_ahead": np.arange(1, self.horizon + 1), "control": pair.base,
                "treated": pair.changed, "difference": pair.difference, "low": pair.low, "high": pair.high,
            })
            for name, pair in pairs.items()
        ]  # fmt: skip
        return pd.concat(frames, ignore_index=True)


def _quantile(df: float, level: float) -> float:
    half = (1 + level) / 2
    return float(special.ndtri(half) if np.isinf(df) else special.stdtrit(df, half))


def _tail(z: float, df: float) -> float:
    return float(special.ndtr(-z) if np.isinf(df) else special.stdtr(df, -z))
