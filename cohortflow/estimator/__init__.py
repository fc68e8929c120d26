"""Tally in, Fit out: rates with their counts, intervals, covariances, draws, and the models as Schedules."""

from cohortflow.estimator.covariance import Covariance
from cohortflow.estimator.fit import Fit, fit
from cohortflow.estimator.transitions import Intervals

__all__ = ["Covariance", "Fit", "Intervals", "fit"]
