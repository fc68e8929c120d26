"""Rates from counts: the Fit record, and `fit`, which makes it for any model.

The maximum-likelihood rate of a move is N_ij / n_i, moves over departures. What is not identified is not
invented: a state without departures has a row of NaN (zeros are never divided), an exit has its unit row, a
move declared impossible has no parameter, a possible move that was not seen has rate 0 with an upper limit,
and a state that nobody left, though it is no declared exit, is flagged.

Source: Anderson & Goodman (1957) Ann. Math. Statist. 28, 89.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Chain, Draws, Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.estimator.covariance import Covariance, covariance
from cohortflow.estimator.layout import Sampler
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.seasonal import place_of
from cohortflow.estimator.transitions import Intervals, intervals, undeclared_absorbing
from cohortflow.estimator.variants import MODELS, build_model, recent_window
from cohortflow.estimator.window import Window, choose_window, plain_rows
from cohortflow.periods import Calendar
from cohortflow.record import Record, frozen_mapping, plain
from cohortflow.states import States
from cohortflow.tally import Tally

FEW_AT_RISK = 30


@dataclass(frozen=True, repr=False, eq=False)
class Fit(Record):
    """Estimated rates of one model, with the counts they came from.

    tally : the counts;  model : name of the model;  window : which moves were used
    rates : RowCounts of the declared states over that window (the pooled rates, whatever the model)
    schedule : the fitted model in the form that the projector takes
    sampler : draws the schedule's matrices from the law of their error
    segments : one Fit a value when `by` was given, else empty
    notes : codes ("no_data:quiet", "undeclared_absorbing:paused", "few_at_risk:new", "no_buckets" ...)
    settings : the model's own numbers (bands, effective n, convergence ...)
    season : (C, K) share of its own rates that a state keeps at each place of the season's cycle, or None

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("fresh", "steady", 8), ("fresh", "left", 2), ("steady", "steady", 9), ("steady", "left", 1)]
    >>> f = cf.fit(cf.read_counts([(1, *m) for m in rows], states))
    >>> f.P.round(2).tolist()
    [[0.0, 0.8, 0.2], [0.0, 0.9, 0.1], [0.0, 0.0, 1.0]]
    """

    tally: Tally
    model: str
    window: Window
    rates: RowCounts
    schedule: Schedule
    sampler: Sampler
    segments: Mapping[str, Fit] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    season: np.ndarray | None = None
    kind: ClassVar[str] = "fit"

    def __post_init__(self) -> None:
        object.__setattr__(self, "segments", frozen_mapping(self.segments))
        object.__setattr__(self, "settings", frozen_mapping(self.settings))

    @property
    def states(self) -> States:
        return self.tally.states

    @property
    def calendar(self) -> Calendar:
        return self.tally.calendar

    @property
    def first(self) -> int:
        """First origin period used."""
        return self.window.first

    @property
    def last(self) -> int:
        """Last origin period used."""
        return self.window.last

    @property
    def excluded(self) -> tuple[int, ...]:
        """Periods whose moves were left out (the moves into them)."""
        return tuple(origin + 1 for origin in self.window.skipped)

    @property
    def n(self) -> np.ndarray:
        """(K, K) weighted counts of moves."""
        return self.rates.N

    @property
    def at_risk(self) -> np.ndarray:
        """(K,) weighted departures from each state."""
        return self.rates.at_risk

    @property
    def effective(self) -> np.ndarray:
        """(K,) effective number of departures under the weights (equal to `at_risk` without weights)."""
        return self.rates.effective

    @property
    def P(self) -> np.ndarray:
        """(K, K) pooled rates; NaN rows without data, unit rows of exits."""
        return pooled_matrix(self.rates, self.states)

    @property
    def matrix(self) -> pd.DataFrame:
        """The pooled rates, row = from."""
        return pd.DataFrame(self.P, index=list(self.states.names), columns=list(self.states.names))

    @property
    def counts(self) -> pd.DataFrame:
        """The (weighted) counts, row = from."""
        return pd.DataFrame(self.n, index=list(self.states.names), columns=list(self.states.names))

    @property
    def chain(self) -> Chain:
        """The plain model as one labelled matrix; NotIdentified for any other model."""
        return self.schedule.chain

    def position(self, ordinal: int) -> int:
        """Place of a period in the model's season (0 for a model without seasons)."""
        return 0 if self.season is None else place_of(self.tally, len(self.season), ordinal)

    def covariance(self, kind: str | None = None) -> Covariance:
        """Covariance of the pooled rates: "multinomial", "customer" or "two_way" (see that module).

        Default: "customer", or "multinomial" for bare counts, which do not tell customers apart.
        """
        names = self.states.names
        return covariance(self.rates, kind or self.best_covariance, row_names=names, column_names=names)

    @property
    def best_covariance(self) -> str:
        """ "customer" when the counts tell customers apart, else "multinomial"."""
        return "multinomial" if "no_buckets" in self.notes else "customer"

    def interval(
        self, level: float = 0.95, method: str = "wilson", *, clustered: bool | str = False
    ) -> Intervals:
        """Rates with limits (the table `transitions`), also of the segments if there are any.

        clustered : True uses the effective numbers of the customer-robust covariance, "two_way" those of the
            two-way one; with few groups the normal quantile is replaced by Student's. A segment with a single
            bucket of customers has plain limits.
        """
        kind = clustered if isinstance(clustered, str) else ("customer" if clustered else "none")
        fits = {"all": self} if not self.segments else {"all": self, **self.segments}
        kinds = [kind if f is self or "no_buckets" not in f.notes else "none" for f in fits.values()]
        tables = [
            f._intervals(level, method, k, name) for k, (name, f) in zip(kinds, fits.items(), strict=True)
        ]
        return Intervals(pd.concat(tables, ignore_index=True), level, tables[0]["method"].iloc[0], kind)

    def _intervals(self, level: float, method: str, kind: str, segment: str) -> pd.DataFrame:
        robust = None if kind == "none" else self.covariance(kind)
        return intervals(self.rates, self.states, level=level, method=method, robust=robust, segment=segment)

    def draws(self, n: int, *, rng: int | np.random.Generator, covariance: str | None = None) -> Draws:
        """n draws of the schedule's matrices from the law of their estimation error.

        covariance : as for `covariance`. They stay probability rows, keep structural zeros, and have that
        covariance at first order (see draws.py).
        """
        return self.sampler.draws(self.schedule, n, rng=rng, covariance=covariance or self.best_covariance)

    def to_frame(self) -> pd.DataFrame:
        """The table `transitions` with Wilson limits at 95 %."""
        return self.interval().to_frame()

    def headline(self) -> str:
        first, last = self.calendar.label(self.first), self.calendar.label(self.last + 1)
        return (
            f"fit of the {self.model} model: {len(self.states)} states per {self.calendar.kind}, "
            f"{int(self.rates.n.sum()):,} moves, {first} to {last}"
        )

    def about(self) -> Mapping[str, Any]:
        label = self.calendar.label
        return {
            "model": self.model,
            "first": label(self.first),
            "last": label(self.last + 1),
            "excluded": [label(p) for p in self.excluded],
            "half_life": self.window.half_life,
            "notes": list(self.notes),
            **plain(self.settings),
        }


def fit(
    tally: Tally,
    *,
    model: str = "plain",
    window: int | None = None,
    half_life: float | None = None,
    exclude: Iterable[str | int] = (),
    by: str | None = None,
    **options: Any,
) -> Fit:
    """Fit one model to counts.

    Parameters
    ----------
    tally : Tally
    model : plain | recent | seasonal | tenure | time_in_state | segment | second_order | mover_stayer | mixture
    window : use only the latest `window` periods of moves
    half_life : a move's weight halves every so many periods
    exclude : labels or ordinals of periods whose moves are left out
    by : a segment column: also fit each of its values (`Fit.segments`)
    options : what the model takes (`bands` for tenure, `types` for mixture ...); an unknown one is refused

    Raises CallError for unknown models, options, segments; NotIdentified when nothing is left to count or the
    model needs counts that this source does not hold; InputError when an impossible move was counted.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> moves = [(1, "fresh", "steady", 8), (1, "fresh", "left", 2)]
    >>> moves += [(2, "steady", "steady", 9), (2, "steady", "left", 1)]
    >>> fit(cf.read_counts(moves, states), model="plain").matrix.loc["fresh"].tolist()
    [0.0, 0.8, 0.2]
    """
    if model not in MODELS:
        raise CallError(f'Unknown model "{model}"{nearest(model, MODELS)}. Models: {listed(MODELS)}.')
    shared: dict[str, Any] = {"window": window, "half_life": half_life}
    if model == "recent":
        shared = recent_window(tally, window, half_life)
    shared["exclude"] = tuple(exclude)
    chosen = choose_window(tally, **shared)
    rates = plain_rows(tally, chosen)
    built = build_model(model, tally, chosen, rates, by=by, options=options)
    segments = {}
    if by is not None:
        inner = "plain" if model == "segment" else model
        kept = {} if model == "segment" else options
        segments = {
            value: fit(part, model=inner, **shared, **kept)
            for value, part in tally.by_segment(by).items()
            if part.origins()
        }
    notes = (*row_notes(rates, tally.states), *built.notes)
    return Fit(
        tally,
        model,
        chosen,
        rates,
        built.schedule,
        built.sampler,
        segments,
        notes,
        built.settings,
        built.season,
    )


def pooled_matrix(rates: RowCounts, states: States) -> np.ndarray:
    """(K, K) shares of the counts, with the unit rows of exits."""
    return np.where(states.exit_mask[:, None], np.eye(len(states)), rates.P)


def row_notes(rates: RowCounts, states: States) -> tuple[str, ...]:
    """Codes of what a reader must know about the pooled rates."""
    raw = rates.sums(rates.n).sum(axis=1)
    notes = [
        f"no_data:{n}" for n, r in zip(states.names, raw, strict=True) if r == 0 and n in states.remaining
    ]
    notes += [f"undeclared_absorbing:{states.names[i]}" for i in undeclared_absorbing(rates, states)]
    few = [n for n, r in zip(states.names, raw, strict=True) if 0 < r < FEW_AT_RISK]
    notes += [f"few_at_risk:{n}" for n in few]
    if len(np.unique(rates.bucket)) < 2:
        notes.append("no_buckets")
    return tuple(notes)
