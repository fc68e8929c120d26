r"""The money of one customer: what a period and a move pay, discounted; its mean, its spread, its derivative.

Period p (p = 1, 2, ...) runs from the end of period p-1 to its own end and pays

    y_ij = w r_i + (1 - w) r_j + g_ij          i at its start, j at its end; r per period, g on the move
    timing  start w = 1,  middle w = 1/2,  end w = 0

discounted by b^(p - 1 + lag), b = (1 + rate)^(-1 / periods a year); lag 0, 1/2 or 1 as the timing says, or
1 / 0 when the first period is said to be discounted by a whole period or not at all.
With rho_i = sum_j p_ij y_ij:

    V = rho + b P V_next                       finite horizon: V_H = 0;  for ever: (I - b P) V = rho
    S = sum_j p_ij (y^2 + 2 b y V_j) + b^2 P S    second moment of one customer's total
    dV_a / dP_ij = M_ai (y_ij + b V_j)         M expected discounted visits

Without a discount the value for ever exists only where whoever never leaves costs and brings nothing.
Sources: Howard (1960), Dynamic Programming and Markov Processes; Pfeifer & Carraway (2000) J. Interactive
Marketing 14(2); Sobel (1982) J. Appl. Prob. 19 (spread of the discounted total).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.chain import Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.markov.gradient import Derivative
from cohortflow.markov.structure import analyse, leads_to
from cohortflow.projector.accept import Array, Flags
from cohortflow.projector.amounts import Amounts
from cohortflow.projector.unroll import unroll
from cohortflow.states import States

TIMINGS = {"start": (1.0, 0.0), "middle": (0.5, 0.5), "end": (0.0, 1.0)}


@dataclass(frozen=True, eq=False)
class Terms:
    """How money is counted.

    per_period : (K,) contribution a customer a period;  on_move : (K, K) amount paid on a move
    factor : discount factor a period, 1 = none;  weight : w, share of the state at the period's start
    lag : periods by which the first period's money is discounted
    error : (K, K) covariance of per_period where it was estimated, else None
    once : (K,) flags of exits that pay in the period of leaving only (observed amounts), else None
    """

    per_period: Array
    on_move: Array
    factor: float = 1.0
    weight: float = 0.5
    lag: float = 0.5
    error: Array | None = None
    once: Flags | None = None

    def amounts(self) -> Array:
        """(K, K) y_ij."""
        w, r = self.weight, self.per_period
        y = w * r[:, None] + (1 - w) * r[None] + self.on_move
        return y if self.once is None else np.where(self.once[:, None], 0.0, y)


def money_terms(
    states: States,
    per_period: Any,
    *,
    on_move: Iterable[Any] = (),
    discount_rate: float = 0.0,
    periods_a_year: float = 1.0,
    timing: str = "middle",
    first_period_discounted: bool | None = None,
) -> Terms:
    """Terms from amounts by state, (from, to, amount) moves, a yearly rate and the timing; see `value`.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> round(money_terms(states, {"steady": 20}, discount_rate=0.1, timing="end").factor, 6)
    0.909091
    """
    if timing not in TIMINGS:
        raise CallError(f'Unknown timing "{timing}"{nearest(timing, TIMINGS)}. Allowed: {listed(TIMINGS)}.')
    if not np.isfinite(discount_rate) or discount_rate <= -1:
        raise CallError(f"discount_rate is {discount_rate!r}; it is a yearly rate above -1, such as 0.08.")
    if discount_rate and not np.isfinite(periods_a_year):
        raise CallError(
            "These periods are plain steps without a length; a yearly discount_rate needs a calendar."
        )
    weight, lag = TIMINGS[timing]
    if first_period_discounted is not None:
        lag = 1.0 if first_period_discounted else 0.0
    factor = (1.0 + discount_rate) ** (-1.0 / periods_a_year) if discount_rate else 1.0
    terms = Terms(amounts_by_state(per_period, states), _by_move(on_move, states), factor, weight, lag)
    if isinstance(per_period, Amounts):
        return replace(terms, error=np.nan_to_num(per_period.covariance), once=states.exit_mask)
    return terms


@dataclass(frozen=True, eq=False)
class Worth:
    """(K,) value and standard deviation of a customer now in, or newly in, each declared state."""

    now: Array
    sd_now: Array
    new: Array
    sd_new: Array
    reasons: tuple[str, ...]


def worth(schedule: Schedule, terms: Terms, *, horizon: int | None, first_step: int = 0) -> Worth:
    """Values by declared state for any Schedule, from its unrolled chain (see the module text)."""
    chain = unroll(schedule, first_step=first_step)
    y = terms.amounts()[np.ix_(chain.report, chain.report)]
    if horizon is None:
        mean, second, endless = _for_ever(chain.P, y, terms.factor)
    else:
        mean, second = _until(chain.P, y, terms.factor, horizon)
        endless = np.zeros(len(mean), dtype=bool)
    scale = terms.factor**terms.lag

    def of(laws: Array) -> tuple[Array, Array]:
        lost = ((laws > 0) @ chain.clouded) | ((laws > 0) @ endless)
        v = laws @ np.where(endless, 0.0, mean)
        spread = np.sqrt(np.maximum(laws @ np.where(endless, 0.0, second) - v**2, 0.0))
        return np.where(lost, np.nan, scale * v), np.where(lost, np.nan, scale * spread)

    names = schedule.states.names
    unclear = chain.undefined()
    stuck = [n for k, n in enumerate(names) if chain.start[k][endless].any() and not unclear[k]]
    reasons = [f"no_exit_no_discount:{n}" for n in stuck if n not in schedule.states.exits]
    return Worth(
        *of(chain.start), *of(chain.join), (*reasons, *(f"rows_without_data:{s}" for s in schedule.unknown))
    )


def value_derivative(P: Array, terms: Terms, *, horizon: int | None) -> Derivative:
    """Of the value from each of the K states of one chain with respect to P; NaN targets where undefined."""
    y, b, scale = terms.amounts(), terms.factor, terms.factor**terms.lag
    if horizon is None:
        mean, _, endless = _for_ever(P, y, b)
        kept = ~endless & ~_settled(P, y, b)
        visits = np.zeros_like(P)
        visits[np.ix_(kept, kept)] = np.linalg.inv(np.eye(int(kept.sum())) - b * P[np.ix_(kept, kept)])
        visits[endless] = np.nan
        ahead = np.where(endless, 0.0, mean)
        return Derivative(scale * mean, scale * visits[None], b * ahead[None, None], scale * visits, y)
    values, powers = [np.zeros(len(P))], [np.eye(len(P))]
    for _ in range(horizon):
        values.append((P * y).sum(axis=1) + b * P @ values[-1])
        powers.append(b * powers[-1] @ P)
    left = scale * np.stack(powers[:horizon])
    right = b * np.stack(values[horizon - 1 :: -1])[:, None, :]
    return Derivative(scale * values[-1], left, right, left.sum(axis=0), y)


# ---- mean and second moment ----
def _until(P: Array, y: Array, b: float, horizon: int) -> tuple[Array, Array]:
    mean, second = np.zeros(len(P)), np.zeros(len(P))
    for _ in range(horizon):
        second = (P * (y**2 + 2 * b * y * mean[None])).sum(axis=1) + b**2 * P @ second
        mean = (P * y).sum(axis=1) + b * P @ mean
    return mean, second


def _for_ever(P: Array, y: Array, b: float) -> tuple[Array, Array, Flags]:
    """(mean, second moment, flags of states without a value)."""
    done = _settled(P, y, b)
    moves = P > 0
    stuck = [g for g in analyse(P).closed if not done[list(g)].all()] if b >= 1 else []
    endless = leads_to(moves, [s for g in stuck for s in g]) if stuck else np.zeros(len(P), dtype=bool)
    kept = ~endless & ~done
    rows = np.ix_(kept, kept)
    mean, second = np.zeros(len(P)), np.zeros(len(P))
    one = np.eye(int(kept.sum()))
    mean[kept] = np.linalg.solve(one - b * P[rows], (P * y).sum(axis=1)[kept])
    money = (P * (y**2 + 2 * b * y * mean[None])).sum(axis=1)
    second[kept] = np.linalg.solve(one - b**2 * P[rows], money[kept])
    mean[endless] = second[endless] = np.nan
    return mean, second, endless


def _settled(P: Array, y: Array, b: float) -> Flags:
    """Closed groups in which no money flows: their value is 0, with or without a discount."""
    flows = (P > 0) & (y != 0)
    out = np.zeros(len(P), dtype=bool)
    if b < 1:
        return out
    for group in analyse(P).closed:
        out[list(group)] = not flows[np.ix_(group, group)].any()
    return out


# ---- the amounts as given ----
def amounts_by_state(per_period: Any, states: States) -> Array:
    """(K,) amounts from a mapping by state name (not named: 0), Amounts, or one number a state."""
    if isinstance(per_period, Amounts):
        return np.nan_to_num(per_period.mean)
    out = np.zeros(len(states))
    if isinstance(per_period, (Mapping, pd.Series)):
        for name, amount in per_period.items():
            out[states.index(str(name))] = float(amount)
    else:
        out = np.array(per_period, dtype=float)
    if out.shape != (len(states),) or not np.isfinite(out).all():
        raise CallError(
            f"per_period takes an amount by state name, or one finite number for each of the {len(states)} "
            f"states; got shape {out.shape}."
        )
    return out


def _by_move(on_move: Iterable[Any], states: States) -> Array:
    table = np.array(on_move, dtype=float) if isinstance(on_move, np.ndarray) else None
    if table is not None and table.shape == (len(states), len(states)):
        return table
    out = np.zeros((len(states), len(states)))
    for row in on_move:
        origin, target, amount = (row.from_, row.to, row.amount) if hasattr(row, "from_") else tuple(row)
        out[states.index(str(origin)), states.index(str(target))] += float(amount)
    return out
