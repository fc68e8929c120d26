"""Rates in continuous time: the record that spells with exact dates and panels seen at uneven times lead to."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from cohortflow.chain import Chain, Draws, Schedule
from cohortflow.errors import CallError
from cohortflow.estimator.draws import generator
from cohortflow.markov.rates import transition_matrix
from cohortflow.periods import Calendar
from cohortflow.record import Record, frozen_array
from cohortflow.states import States

Array = NDArray[np.float64]


@dataclass(frozen=True, repr=False, eq=False)
class ExactRates(Record):
    """Rates of moving, a unit of time.

    Q : (K, K) generator, rows sum to 0;  moves : (K, K) bool, the moves that have a rate
    events : (K, K) moves counted (NaN where a panel does not show them);  exposure : (K,) time (NaN likewise)
    log_covariance : (K*K, K*K) of the logs of the rates;  low, high : (K, K) limits
    unit : of time, in words;  method : exposure | exposure_clustered | likelihood;  notes : codes

    `matrix(t)`, `chain(t)`, `schedule(t)` and `draws(n, t)` hand it to whatever takes a chain, for any length t.
    """

    states: States
    Q: Array
    moves: NDArray[np.bool_]
    events: Array
    exposure: Array
    log_covariance: Array
    low: Array
    high: Array
    level: float
    unit: str
    method: str
    notes: tuple[str, ...] = ()
    settings: Mapping[str, Any] | None = None
    kind: ClassVar[str] = "exact_rates"

    def __post_init__(self) -> None:
        for name in ("Q", "events", "exposure", "log_covariance", "low", "high"):
            object.__setattr__(self, name, frozen_array(getattr(self, name)))

    def matrix(self, t: float) -> Array:
        """(K, K) probabilities of moves within a time t: exp(Q t)."""
        return transition_matrix(self.Q, t)

    def chain(self, t: float, *, period: str | Calendar = "month") -> Chain:
        """The chain with steps of length t (in this record's unit of time)."""
        return Chain(self.states, self.matrix(t), period=period)

    def schedule(self, t: float, *, period: str | Calendar = "month") -> Schedule:
        """The same as a Schedule."""
        return self.chain(t, period=period).schedule

    def draws(
        self, n: int, t: float, *, rng: int | np.random.Generator, period: str | Calendar = "month"
    ) -> Draws:
        """n draws of the matrix of a step of length t from the law of the rates' error.

        Exposures: gamma with the events as shape (a move never seen: half an event). Likelihood: log-normal.
        """
        Q = self.drawn_rates(n, generator(rng))
        matrices = np.stack([transition_matrix(q, t) for q in Q])[:, None]
        return Draws.of_matrices(self.schedule(t, period=period), [matrices])

    def drawn_rates(self, n: int, rng: np.random.Generator) -> Array:
        """(n, K, K) draws of Q."""
        if n < 1:
            raise CallError(f"The number of draws is at least 1; got {n}.")
        cells = np.flatnonzero(self.moves.ravel())
        spread = np.sqrt(np.diag(self.log_covariance))[cells]
        values, vectors = np.linalg.eigh(self.log_covariance[np.ix_(cells, cells)])
        z = rng.standard_normal((n, len(cells))) @ (vectors * np.sqrt(np.maximum(values, 0.0))).T
        rates = self.Q.ravel()[cells]
        if self.method == "likelihood":
            drawn = rates * np.exp(z)
        else:
            shape = np.where(rates > 0, 1 / np.maximum(spread, 1e-12) ** 2, 0.5)
            unit = np.where(rates > 0, z / np.maximum(spread, 1e-12), rng.standard_normal(z.shape))
            mean = np.where(rates > 0, rates, 0.5 / np.repeat(self.exposure, len(self.states))[cells])
            drawn = mean * special.gammaincinv(shape, np.clip(special.ndtr(unit), 1e-300, 1 - 1e-16)) / shape
        out = np.zeros((n, self.moves.size))
        out[:, cells] = drawn
        return closed(out.reshape(n, *self.moves.shape))

    def to_frame(self) -> pd.DataFrame:
        """from, to, events, exposure, rate, low, high, level, method: one row a possible move."""
        i, j = np.nonzero(self.moves)
        names = np.array(self.states.names, dtype=object)
        return pd.DataFrame(
            {
                "from": names[i],
                "to": names[j],
                "events": self.events[i, j],
                "exposure": self.exposure[i],
                "rate": self.Q[i, j],
                "low": self.low[i, j],
                "high": self.high[i, j],
                "level": self.level,
                "method": self.method,
            }
        )

    def headline(self) -> str:
        return f"{int(self.moves.sum())} rates a {self.unit} of {len(self.states)} states by {self.method}"

    def about(self) -> Mapping[str, Any]:
        return {"unit": self.unit, "notes": list(self.notes), **(self.settings or {})}


def closed(rates: Array) -> Array:
    """(..., K, K) off-diagonal rates with the diagonal that makes rows sum to 0.

    >>> closed(np.array([[0.0, 0.2], [0.5, 0.0]])).tolist()
    [[-0.2, 0.2], [0.5, -0.5]]
    """
    diagonal = np.arange(rates.shape[-1])
    out = rates.copy()
    out[..., diagonal, diagonal] = 0.0
    out[..., diagonal, diagonal] = 0.0 - out.sum(axis=-1)
    return out


def state_codes(column: pd.Series, states: States) -> NDArray[np.int64]:
    """Position of the state in each row, -1 where it is missing; CallError for a name that is no state.

    >>> state_codes(pd.Series(["on", None, "off"]), States(["on", "off"])).tolist()
    [0, -1, 1]
    """
    codes = pd.Categorical(column, categories=list(states.names)).codes.astype(np.int64)
    strange = (codes < 0) & column.notna().to_numpy()
    if strange.any():
        states.index(str(column.to_numpy()[strange][0]))
    return codes
