"""Who joins and who returns: how many a period, and where they start, kept apart, each with its uncertainty.

    N_h | rate ~ Poisson(rate_h),   E rate_h = mean_h,   Cov(rate_h, rate_k) = extra_hk
    customers by state | N_h ~ multinomial(N_h, q),  q ~ Dirichlet(concentration x mix_h); infinite: q = mix_h

so that Cov(N_h, N_k) = extra_hk + 1{h=k} mean_h. Rates are drawn log-normal with these two moments, hence
never negative. Joiners and returners are forecast separately and taken as independent.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import CallError
from cohortflow.periods import Calendar
from cohortflow.projector.accept import Array
from cohortflow.record import Record, frozen_array, frozen_mapping
from cohortflow.states import States

INFLOWS = ("joined", "returned")


@dataclass(frozen=True, eq=False)
class Inflow:
    """The forecast of one kind.

    mean : (H,) expected number;  extra : (H, H) covariance of the rate beyond Poisson chance
    mix : (H, K) rows are laws over the state they start in;  concentration : of the Dirichlet law around it
    note : code, for instance "plan_taken_as_given"
    """

    mean: Array
    extra: Array
    mix: Array
    concentration: float = np.inf
    note: str = ""

    def __post_init__(self) -> None:
        for field in ("mean", "extra", "mix"):
            object.__setattr__(self, field, frozen_array(getattr(self, field)))
        periods = len(self.mean)
        if self.extra.shape != (periods, periods) or len(self.mix) != periods or (self.mean < 0).any():
            raise CallError(
                f"An inflow of {periods} periods needs mean (H,) not below 0, extra (H, H) and mix (H, K); "
                "got "
                f"{self.mean.shape}, {self.extra.shape} and {self.mix.shape}."
            )

    @property
    def expected(self) -> Array:
        """(H, K) expected customers by state."""
        return self.mean[:, None] * self.mix

    @property
    def covariance(self) -> Array:
        """(H, H) covariance of the numbers."""
        return self.extra + np.diag(self.mean)

    def state_noise(self) -> Array:
        """(H, K, K) covariance of customers by state that comes from the split alone, given the numbers.

        E[N](diag q - qq') + E[N(N-1)] (diag q - qq') / (concentration + 1); the second is 0 for a fixed mix.
        """
        split = np.einsum("hk,kl->hkl", self.mix, np.eye(self.mix.shape[1]))
        split = split - np.einsum("hk,hl->hkl", self.mix, self.mix)
        pairs = np.diag(self.extra) + self.mean**2
        return split * (self.mean + pairs / (self.concentration + 1.0))[:, None, None]

    def draw(self, size: int, rng: np.random.Generator) -> Array:
        """(size, H, K) whole customers by state."""
        numbers = rng.poisson(_rates(self.mean, self.extra, size, rng))
        out = np.zeros((size, *self.mix.shape))
        for h, law in enumerate(self.mix):
            if self.mean[h] <= 0:
                continue
            q = np.tile(law, (size, 1))
            if np.isfinite(self.concentration):
                q = np.zeros_like(q)
                q[:, law > 0] = rng.dirichlet(self.concentration * law[law > 0], size)
            out[:, h] = rng.multinomial(numbers[:, h], q)
        return out


@dataclass(frozen=True, repr=False, eq=False)
class Joiners(Record):
    """Forecast of joiners and returners for the H periods after a base period.

    inflows : "joined" and "returned" to their Inflow
    base : ordinal of the base period, None outside a calendar

    >>> from cohortflow import States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> planned_numbers(states, {"fresh": 30}, periods=3)
    <joiners and returners, planned, 3 periods: 30.0 a period>
    """

    states: States
    calendar: Calendar
    base: int | None
    method: str
    inflows: Mapping[str, Inflow]
    kind: ClassVar[str] = "joiners"

    def __post_init__(self) -> None:
        object.__setattr__(self, "inflows", frozen_mapping(self.inflows))

    @property
    def periods(self) -> int:
        """H."""
        return len(next(iter(self.inflows.values())).mean)

    def expected(self, kind: str | None = None) -> Array:
        """(H, K) expected customers by state, of one kind or of both."""
        if kind is not None:
            found = self.inflows.get(kind)
            return np.zeros((self.periods, len(self.states))) if found is None else found.expected
        return sum((i.expected for i in self.inflows.values()), np.zeros((self.periods, len(self.states))))

    def a_period(self) -> Array:
        """(K,) expected customers by state a period, averaged over the last cycle of seasons (or all)."""
        return self.expected()[-min(self.periods, self.calendar.cycle) :].mean(axis=0)

    def relative_error(self) -> float:
        """Variance of the long-run rate over its square: what the periods share, not what averages out."""
        if self.periods < 2 or not self.expected().any():
            return 0.0
        pairs = self.periods * (self.periods - 1)
        shared = sum((i.extra.sum() - np.trace(i.extra)) / pairs for i in self.inflows.values())
        return float(max(shared, 0.0) / self.expected().sum(axis=1).mean() ** 2)

    def draw(self, size: int, rng: np.random.Generator) -> Array:
        """(size, H, K) customers of both kinds."""
        return sum((i.draw(size, rng) for i in self.inflows.values()), np.zeros(1))

    def cut(self, periods: int) -> Joiners:
        """The first `periods` of them; CallError when there are fewer."""
        if periods > self.periods:
            raise CallError(
                f"The joiners are forecast for {self.periods} periods, the projection asks for {periods}. "
                "Forecast them as far."
            )
        kept = {
            kind: Inflow(
                i.mean[:periods], i.extra[:periods, :periods], i.mix[:periods], i.concentration, i.note
            )
            for kind, i in self.inflows.items()
        }
        return Joiners(self.states, self.calendar, self.base, self.method, kept)

    def to_frame(self) -> pd.DataFrame:
        """period, periods_ahead, kind, state, customers, std_error (of customers, all sources)."""
        frames = []
        for kind, inflow in self.inflows.items():
            spread = (
                np.einsum("hkk->hk", inflow.state_noise())
                + inflow.mix**2 * np.diag(inflow.covariance)[:, None]
            )
            ahead, state = np.nonzero(inflow.mix > 0)
            frames.append(
                pd.DataFrame(
                    {
                        "period": [period_label(self.calendar, self.base, int(h) + 1) for h in ahead],
                        "periods_ahead": ahead + 1,
                        "kind": kind,
                        "state": np.array(self.states.names, dtype=object)[state],
                        "customers": inflow.expected[ahead, state],
                        "std_error": np.sqrt(spread[ahead, state]),
                    }
                )
            )
        return pd.concat(frames, ignore_index=True)

    def headline(self) -> str:
        number = self.expected().sum(axis=1).mean()
        return f"joiners and returners, {self.method}, {self.periods} periods: {number:,.1f} a period"

    def about(self) -> Mapping[str, Any]:
        notes = {kind: inflow.note for kind, inflow in self.inflows.items() if inflow.note}
        return {"method": self.method, "notes": notes}


def period_label(calendar: Calendar, base: int | None, ahead: int) -> str | None:
    """Label of the period `ahead` of the base; None outside a calendar."""
    return None if base is None else calendar.label(base + ahead)


def planned_numbers(
    states: States,
    joined: Any,
    *,
    returned: Any = None,
    periods: int,
    calendar: Calendar | str = "month",
    base: int | None = None,
    method: str = "planned",
) -> Joiners:
    """Joiners from numbers given by hand: (K,), a mapping by state, or (H, K); Poisson around them.

    >>> from cohortflow import States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> planned_numbers(states, {"fresh": 30}, periods=3).inflows["joined"].covariance.diagonal()
    array([30., 30., 30.])
    """
    found = {}
    for kind, values in zip(INFLOWS, (joined, returned), strict=True):
        if values is not None:
            found[kind] = given(states, values, periods, kind)
    place = calendar if isinstance(calendar, Calendar) else Calendar(calendar)
    return Joiners(states, place, base, method, found)


def nobody(states: States, calendar: Calendar, base: int | None, periods: int) -> Joiners:
    """Nobody joins or returns, for certain."""
    none = np.zeros((periods, len(states)))
    return Joiners(states, calendar, base, "none", {k: given(states, none, periods, k) for k in INFLOWS})


def given(states: States, values: Any, periods: int, kind: str) -> Inflow:
    """An Inflow of expected numbers by state, Poisson around them; nobody can join into an exit."""
    table = _table(states, values, periods, kind)
    total = table.sum(axis=1)
    mix = np.divide(table, total[:, None], out=_somewhere(states, periods), where=total[:, None] > 0)
    note = "plan_taken_as_given" if total.any() else ""
    return Inflow(total, np.zeros((periods, periods)), mix, note=note)


def _table(states: States, values: Any, periods: int, kind: str) -> Array:
    if isinstance(values, (Mapping, pd.Series)):
        row = np.zeros(len(states))
        for state, number in values.items():
            row[states.index(str(state))] = float(number)
        values = row
    table = np.array(values, dtype=float)
    if table.shape == (len(states),):
        table = np.tile(table, (periods, 1))
    if table.shape != (periods, len(states)) or not (np.isfinite(table).all() and (table >= 0).all()):
        raise CallError(
            f"Customers who {'join' if kind == 'joined' else 'return'} are numbers not below 0: one a state "
            f"({len(states)}), or one row a period ({periods} x {len(states)}); got shape {table.shape}."
        )
    if table[:, states.exit_mask].any():
        name = states.names[int(np.flatnonzero(states.exit_mask & table.any(axis=0))[0])]
        raise CallError(f'Nobody joins into the exit "{name}"; give the state that they start in.')
    return table


def _somewhere(states: States, periods: int) -> Array:
    """A law to stand where nobody is expected: evenly over the entry states (else all that are not exits)."""
    mask = states.mask(states.entries or states.remaining).astype(float)
    return np.tile(mask / mask.sum(), (periods, 1))


def _rates(mean: Array, extra: Array, size: int, rng: np.random.Generator) -> Array:
    """(size, H) log-normal rates with the given mean and covariance; where the mean is 0, 0."""
    if not extra.any():
        return np.broadcast_to(mean, (size, len(mean)))
    safe = np.where(mean > 0, mean, 1.0)
    scale = np.log1p(np.where(np.outer(mean, mean) > 0, extra / np.outer(safe, safe), 0.0))
    values, vectors = np.linalg.eigh(scale)
    shock = rng.standard_normal((size, len(mean))) * np.sqrt(np.maximum(values, 0.0)) @ vectors.T
    return mean * np.exp(shock - np.diag(scale) / 2)
