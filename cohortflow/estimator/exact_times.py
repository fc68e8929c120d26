"""Exact dates and uneven looks: rates in continuous time, and shares over exact time.

rates_from_spells     moves over time spent, with exact Poisson limits (exposure.py)
generator_from_panel  maximum likelihood from states seen at uneven times (panel.py)
occupancy             shares by state without a model, with standard errors (occupancy.py)

`ExactRates.chain(t)` and `.draws(n, t)` give the projector a chain for steps of any length.
"""

from cohortflow.estimator.exact_rates import ExactRates
from cohortflow.estimator.exposure import garwood, rates_from_spells
from cohortflow.estimator.occupancy import Occupancy, occupancy
from cohortflow.estimator.panel import generator_from_panel

__all__ = ["ExactRates", "Occupancy", "garwood", "generator_from_panel", "occupancy", "rates_from_spells"]
