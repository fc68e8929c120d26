"""A forecast made from a tally alone, as backtests and effects need it: fit, joiners, shocks, projection."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from cohortflow.chain import Draws
from cohortflow.errors import NotIdentified
from cohortflow.estimator import Fit, fit
from cohortflow.estimator.shock_paths import ShakenDraws, future_rates, shocks_of
from cohortflow.estimator.shocks import Shocks
from cohortflow.projector import Joiners, Projection, joiner_forecast, project
from cohortflow.projector.accept import first_step
from cohortflow.projector.mix import walk
from cohortflow.tally import Tally


@dataclass(frozen=True, eq=False)
class Setting:
    """What all forecasts of one assessment share.

    horizon : periods ahead;  level : of the bands;  draws : how many make a band
    joiners : method of the joiner forecast;  totals : named sums of states
    options : model -> options of `fit`
    """

    horizon: int
    level: float = 0.90
    draws: int = 500
    joiners: str = "constant"
    totals: Mapping[str, Sequence[str]] | None = None
    options: Mapping[str, Mapping[str, Any]] | None = None

    def of_model(self, model: str) -> Mapping[str, Any]:
        """Options of one model."""
        return (self.options or {}).get(model, {})

    def fit(self, tally: Tally, model: str, **more: Any) -> Fit:
        """The model fitted to the tally with its options."""
        return fit(tally, model=model, **{**self.of_model(model), **more})


def known_method(joiners: str) -> str:
    """The method itself; for "planned" the same periods of last year, since past plans are not known."""
    return "last_year" if joiners == "planned" else joiners


def coming(tally: Tally, setting: Setting) -> Joiners | None:
    """Joiners by the setting's method, "constant" where the history is too short; None for bare counts."""
    if "starts" not in tally.meta.tables or setting.joiners == "none":
        return None
    try:
        return joiner_forecast(tally, setting.horizon, method=setting.joiners)
    except NotIdentified:
        return joiner_forecast(tally, setting.horizon, method="constant")


def outlook(
    fitted: Fit,
    setting: Setting,
    *,
    joiners: Joiners | None,
    rng: np.random.Generator,
    rates: Draws | int | None = None,
    shocks: Draws | None = None,
) -> Projection:
    """The projection of a fit from its last period on; `joiners` None: the customers of now only."""
    return project(
        fitted,
        periods=setting.horizon,
        joiners=joiners,
        totals=setting.totals,
        level=setting.level,
        rng=rng,
        draws=setting.draws if rates is None else rates,
        shocks=shocks,
        covariance=fitted.best_covariance,
    )


@dataclass(frozen=True, eq=False)
class SharedLuck:
    """The law of shocks of one tally, estimated once for all models with the same seasons.

    known : number of seasons -> the law, None where the history cannot tell it
    """

    known: dict[int, Shocks | None] = field(default_factory=dict)

    def draws(self, fitted: Fit, setting: Setting, rng: np.random.Generator) -> ShakenDraws | None:
        """Draws of the next periods with luck shared by everybody; None where its size is not known."""
        seasons = 0 if fitted.season is None else len(fitted.season)
        if seasons not in self.known:
            try:
                self.known[seasons] = shocks_of(fitted)
            except NotIdentified:
                self.known[seasons] = None
        shocks = self.known[seasons]
        if shocks is None:
            return None
        return future_rates(fitted, setting.horizon, setting.draws, rng=rng, shocks=shocks)


def expected_live(fitted: Fit, setting: Setting, joiners: Joiners | None) -> float:
    """Expected `all_live` at the horizon."""
    inflow = None if joiners is None else joiners.expected()
    start = fitted.tally.mix()
    base = fitted.tally.meta.last
    first = first_step(fitted.schedule, base)
    ahead = walk(fitted.schedule, start, setting.horizon, inflow, first_step=first)
    return float(ahead.counts[-1, fitted.states.live_mask].sum())


def one_step(rates: Draws, base: int) -> np.ndarray:
    """(K, K) law of the next move by declared state, averaged over draws of the rates."""
    schedule = rates.schedule
    step = first_step(schedule, base)
    size = len(schedule.states)
    law = np.zeros((size, size))
    for c, component in enumerate(schedule.components):
        matrix = rates.matrix(c, step)
        law += (np.asarray(rates.start[c]) @ matrix).mean(axis=0) @ component.collapse(size)
    return law
