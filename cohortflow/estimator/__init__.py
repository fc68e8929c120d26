"""Tally in, Fit out: rates with their counts, intervals, covariances, draws, and the models as Schedules.

fit.py           the Fit record and `fit`          variants.py    the models by name
rows.py          counts by row, column, bucket, period: what every estimate reads; window.py which of them
interval.py      limits; transitions.py their table  covariance.py  draws.py  the error of the rates
layout.py        rows of rates into matrices; contexts.py, shrink.py, merge.py expanded states and shrinkage
seasonal.py  tenure.py  time_in_state.py  second_order.py  segment.py  gaps.py       one model or option each
mixture.py       latent types, movers and stayers; patterns.py, em.py, mixture_error.py
shocks.py        luck shared by a period; shock_rows.py, log_counts.py what is seen, shock_paths.py what may come
covariates.py    what drives moves; logit.py       period_length.py  longer and shorter periods
exact_times.py   exact dates and uneven looks; exact_rates.py, exposure.py, panel.py, occupancy.py
"""

from cohortflow.estimator.covariance import Covariance
from cohortflow.estimator.covariates import Drivers, drivers
from cohortflow.estimator.exact_times import (
    ExactRates,
    Occupancy,
    generator_from_panel,
    occupancy,
    rates_from_spells,
)
from cohortflow.estimator.fit import Fit, fit
from cohortflow.estimator.period_length import ChangedPeriod, change_period
from cohortflow.estimator.shock_paths import future_rates, shocks_of
from cohortflow.estimator.shocks import Shocks
from cohortflow.estimator.transitions import Intervals

__all__ = [
    "ChangedPeriod",
    "Covariance",
    "Drivers",
    "ExactRates",
    "Fit",
    "Intervals",
    "Occupancy",
    "Shocks",
    "change_period",
    "drivers",
    "fit",
    "future_rates",
    "generator_from_panel",
    "occupancy",
    "rates_from_spells",
    "shocks_of",
]
