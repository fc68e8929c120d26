"""Tally in, Fit out: rates with their counts, intervals, covariances, draws, and the models as Schedules."""

from cohortflow.estimator.covariance import Covariance
from cohortflow.estimator.fit import Fit, fit
from cohortflow.estimator.shock_paths import future_rates, shocks_of
from cohortflow.estimator.shocks import Shocks
from cohortflow.estimator.transitions import Intervals

__all__ = ["Covariance", "Fit", "Intervals", "Shocks", "fit", "future_rates", "shocks_of"]
