"""Shares of customers by state over exact time, without a model: Aalen and Johansen's product of moves.

    P(0, t) = prod_{u <= t} (I + dA(u)),     dA_ij(u) = moves i -> j at u / in i just before u

Right for non-Markov histories too, if leaving the view has nothing to do with moving. Two standard errors:

    greenwood     C <- T'CT + sum_i p_i^2 (diag q_i - q_i q_i') / Y_i        T = I + dA, q_i its row i
    jackknife     U_c <- U_c T + p_i (1_destination - T_i) / Y_i for each customer c at risk in i; se^2 = sum U_c^2

They agree for one decision a customer, and part once states follow each other; the jackknife does not need
the Markov property.
Sources: Aalen & Johansen (1978) Scand. J. Statist. 5, 141; Datta & Satten (2001) Stat. Probab. Lett. 55, 403.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import CallError
from cohortflow.estimator.exact_rates import state_codes
from cohortflow.record import Record, frozen_array
from cohortflow.states import States

Array = NDArray[np.float64]

COLUMNS = ("customer", "start", "stop", "state", "next_state")


@dataclass(frozen=True, repr=False, eq=False)
class Occupancy(Record):
    """Shares over time: times (E,), share (E, K), greenwood and jackknife (E, K) standard errors."""

    states: States
    times: Array
    share: Array
    greenwood: Array
    jackknife: Array
    customers: int
    kind: ClassVar[str] = "occupancy"

    def __post_init__(self) -> None:
        for name in ("times", "share", "greenwood", "jackknife"):
            object.__setattr__(self, name, frozen_array(getattr(self, name)))

    def at(self, time: float) -> pd.DataFrame:
        """The rows of `to_frame` that hold at a time (those of the last move up to it)."""
        where = int(np.searchsorted(self.times, time, side="right")) - 1
        if where < 0:
            raise CallError(f"Time {time} lies before the first time, {self.times[0]}.")
        rows = slice(where * len(self.states), (where + 1) * len(self.states))
        return self.to_frame().iloc[rows].reset_index(drop=True)

    def to_frame(self) -> pd.DataFrame:
        """time, state, share, greenwood, jackknife."""
        names = list(self.states.names)
        return pd.DataFrame(
            {
                "time": np.repeat(self.times, len(names)),
                "state": names * len(self.times),
                "share": self.share.ravel(),
                "greenwood": self.greenwood.ravel(),
                "jackknife": self.jackknife.ravel(),
            }
        )

    def headline(self) -> str:
        return (
            f"occupancy of {len(self.states)} states at {len(self.times)} times, {self.customers:,} customers"
        )

    def about(self) -> Mapping[str, Any]:
        return {"customers": self.customers}


def occupancy(spells: pd.DataFrame, states: States, *, origin: float = 0.0) -> Occupancy:
    """Shares by state from spells (customer, start, stop, state, next_state; missing next_state = censored).

    At risk in (start, stop]. The start law is that of the spells that begin at `origin`. CallError for missing
    columns, empty or reversed spells, or when nobody is there at the origin.

    >>> states = States(["on", "off"], exits=["off"])
    >>> spells = pd.DataFrame({"customer": [1, 2, 3], "start": 0, "stop": [1, 2, 3], "state": "on",
    ...                        "next_state": ["off", None, "off"]})
    >>> occupancy(spells, states).share.round(3).tolist()
    [[1.0, 0.0], [0.667, 0.333], [0.0, 1.0]]
    """
    who, start, stop, state, target = _coded(spells, states)
    size, customers = len(states), int(who.max()) + 1
    begins = start <= origin
    if not begins.any():
        raise CallError(f"No spell begins at the origin {origin}; the shares have no start.")
    p = np.bincount(state[begins], minlength=size) / begins.sum()
    U = np.zeros((customers, size))
    U[who[begins]] = (np.eye(size)[state[begins]] - p) / begins.sum()
    C = (np.diag(p) - np.outer(p, p)) / begins.sum()
    times = np.unique(stop[(target >= 0) & (stop > origin)])
    shares, green, jack = [p], [np.sqrt(np.diag(C))], [np.sqrt((U**2).sum(axis=0))]
    for time in times:
        risk = (start < time) & (stop >= time)
        moved = risk & (stop == time) & (target >= 0)
        p, C, U = _onward(p, C, U, who, state, target, risk, moved)
        shares.append(p)
        green.append(np.sqrt(np.maximum(np.diag(C), 0.0)))
        jack.append(np.sqrt((U**2).sum(axis=0)))
    everything = np.append(origin, times)
    return Occupancy(states, everything, np.array(shares), np.array(green), np.array(jack), customers)


def _onward(
    p: Array,
    C: Array,
    U: Array,
    who: NDArray[np.int64],
    state: NDArray[np.int64],
    target: NDArray[np.int64],
    risk: NDArray[np.bool_],
    moved: NDArray[np.bool_],
) -> tuple[Array, Array, Array]:
    """One time of moves: shares, Greenwood's covariance and the customers' influences after it."""
    size = len(p)
    Y = np.bincount(state[risk], minlength=size)
    T = np.eye(size)
    for i in np.unique(state[moved]):
        T[i] = np.bincount(target[moved & (state == i)], minlength=size) / Y[i]
        T[i, i] += 1 - T[i].sum()
    C, U = T.T @ C @ T, U @ T
    for i in np.unique(state[moved]):
        C = C + p[i] ** 2 * (np.diag(T[i]) - np.outer(T[i], T[i])) / Y[i]
        here = risk & (state == i)
        after = np.where(moved[here], target[here], i)
        U[who[here]] += p[i] * (np.eye(size)[after] - T[i]) / Y[i]
    return p @ T, C, U


def _coded(spells: pd.DataFrame, states: States) -> tuple[Any, ...]:
    missing = [c for c in COLUMNS if c not in spells.columns]
    if missing:
        raise CallError(f"Spells need the columns {', '.join(COLUMNS)}; {', '.join(missing)} is missing.")
    start, stop = (spells[c].to_numpy(float) for c in ("start", "stop"))
    if not (stop > start).all():
        raise CallError(f"A spell stops after it starts; {int((~(stop > start)).sum())} do not.")
    state, target = (state_codes(spells[c], states) for c in ("state", "next_state"))
    if (state < 0).any():
        raise CallError("Every spell is spent in a state; some have none.")
    return pd.factorize(spells["customer"])[0], start, stop, state, target
