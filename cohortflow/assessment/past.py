"""One model's forecast from one past origin, made from what was known then and nothing later."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.assessment.outlook import Setting, SharedLuck, coming, one_step
from cohortflow.chain import Draws
from cohortflow.estimator import Fit
from cohortflow.projector import Joiners
from cohortflow.projector.accept import first_step, opening
from cohortflow.projector.bands import simulate
from cohortflow.projector.mix import walk
from cohortflow.tally import COARSE_BITS, Tally

Array = NDArray[np.float64]

USED = ("moves", "starts", "contexts", "ages", "paths")
FEWEST_BUCKETS = 32


@dataclass(frozen=True, eq=False)
class PastForecast:
    """Customers by state, drawn (D, H+1, K) and expected (H+1, K).

    alone, alone_mean : the customers of the origin;  base, base_mean : with joiners
    next_step : (K, K) law of the next period's moves, averaged over draws
    """

    alone: Array
    alone_mean: Array
    base: Array
    base_mean: Array
    next_step: Array

    @classmethod
    def of(
        cls, past: Tally, model: str, setting: Setting, luck: SharedLuck, rng: np.random.Generator
    ) -> PastForecast:
        """Refit and project from the last period of `past`.

        Joiners are drawn apart from the customers of the origin, with the same draws of rates, and added.
        """
        fitted = setting.fit(past, model)
        shaken = luck.draws(fitted, setting, rng)
        rates = fitted.draws(setting.draws, rng=rng) if shaken is None else shaken.rates
        drawn = rates if shaken is None else _at_once(shaken)
        start = opening(fitted, None, fitted.states)
        alone, alone_mean = _ahead(fitted, setting, drawn, rng, start, None)
        joiners = coming(past, setting)
        if joiners is None:
            return cls(alone, alone_mean, alone, alone_mean, one_step(rates, past.meta.last))
        new, new_mean = _ahead(fitted, setting, drawn, rng, np.zeros_like(start), joiners)
        return cls(alone, alone_mean, alone + new, alone_mean + new_mean, one_step(rates, past.meta.last))


def slimmed(tally: Tally, *, segments: bool) -> Tally:
    """The tally with what refitting needs: coarser buckets, fewer tables, segments only where used.

    The covariance by customer is right for any number of buckets, so rates stay, and bands up to the draws.
    """
    kept = {name: tally.tables[name] for name in USED if name in tally.meta.tables}
    meta = replace(tally.meta, tables=tuple(kept))
    if not segments:
        kept = {name: table.assign(segment=0) for name, table in kept.items()}
        meta = replace(meta, segment_columns=(), segments=((),))
    shift = meta.bucket_bits - COARSE_BITS
    if shift > 0 and len(np.unique(kept["moves"]["bucket"].to_numpy() >> shift)) >= FEWEST_BUCKETS:
        kept = {n: _shifted(t, shift) for n, t in kept.items()}
        meta = replace(meta, bucket_bits=COARSE_BITS)
    return Tally.build(meta, kept)


def _shifted(table: pd.DataFrame, shift: int) -> pd.DataFrame:
    return table.assign(bucket=table["bucket"].to_numpy() >> shift) if "bucket" in table else table


def _ahead(
    fitted: Fit,
    setting: Setting,
    drawn: Draws,
    rng: np.random.Generator,
    start: Array,
    joiners: Joiners | None,
) -> tuple[Array, Array]:
    """Drawn and expected customers; NaN where a state without data is reached."""
    schedule, steps = fitted.schedule, setting.horizon
    first = first_step(schedule, fitted.tally.meta.last)
    inflow = None if joiners is None else joiners.expected()
    central = walk(schedule, start, steps, inflow, first_step=first)
    made = simulate(
        schedule, start, steps, size=drawn.size, rng=rng, draws=drawn, joiners=joiners, first_step=first
    )
    made[:, central.undefined] = np.nan
    return made, central.counts


def _at_once(shaken: Draws) -> Draws:
    """The same draws with all matrices made, since they are walked through twice."""
    return Draws(shaken.schedule, shaken.matrices, shaken.start, shaken.join, shaken.part)
