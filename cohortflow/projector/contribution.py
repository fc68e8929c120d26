"""What a projected base brings over the horizon, those who join included, with the projection's band.

    total = sum_h b^(h - 1 + lag) [ sum_ij F_hij y_ij ]      F_h expected moves of period h; y, b, lag: money.py

The band is that of the drawn counts X, whose deviation from the mean m is paid for as

    w (X_{h-1} - m_{h-1}) r + (1 - w) (X_h - m_h) r + sum_i (X_{h-1,i} - m_{h-1,i}) g_hi

with r per period, w the weight of the state at the start, g_hi what a customer in i is expected to get on moves. So all
parts of the projection's band are in it, and, where prices are estimated, their error. Only the split of a period's
moves is taken as expected, and joiners above the expected number count (1 - w) of a period at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from cohortflow.projector.accept import Array
from cohortflow.projector.bands import quantile_band
from cohortflow.projector.money import Terms
from cohortflow.projector.projection import Projection

MEASURE = "contribution_over_horizon"


@dataclass(frozen=True)
class Contribution:
    """value, low, high of the whole horizon; NaN where a state without data takes part."""

    value: float
    low: float
    high: float


def contribution(projection: Projection, terms: Terms, *, rng: int | np.random.Generator = 1) -> Contribution:
    """Discounted contribution of the base and of all who join up to the horizon.

    terms : how money is counted (`Value.terms`);  rng : for the error of estimated prices

    >>> from cohortflow import Chain, States
    >>> from cohortflow.projector import project, value
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> ahead = project(chain, start={"fresh": 10, "steady": 10}, periods=2, parts=())
    >>> terms = value(chain, per_period={"fresh": 5, "steady": 20}, timing="start").terms
    >>> contribution(ahead, terms).value  # 10 x 5 + 10 x 20, then 17 x 20
    590.0
    """
    y, discount = terms.amounts(), terms.factor ** (np.arange(projection.periods) + terms.lag)
    paid = np.einsum("hij,ij->h", np.where(y == 0, 0.0, projection.walk.flows), y)
    value = float(discount @ paid)
    drawn = value + _deviations(projection, terms) @ discount
    if terms.error is not None:
        drawn = drawn + _price_errors(projection, terms, discount, len(drawn), np.random.default_rng(rng))
    low, high = quantile_band(drawn, projection.level)
    return Contribution(value, float(low), float(high))


def contribution_row(projection: Projection, terms: Terms, currency: str) -> pd.DataFrame:
    """The row of the table `value` with the measure contribution_over_horizon."""
    found = contribution(projection, terms)
    row = (projection.segment, MEASURE, "", found.value, found.low, found.high, currency)
    return pd.DataFrame([row], columns=["segment", "measure", "state", "value", "low", "high", "currency"])


def _deviations(projection: Projection, terms: Terms) -> Array:
    """(D, H) money of each draw and period less the expected."""
    off = np.where(_pays(terms), projection.simulated - projection.mean, 0.0)
    before, after = off[:, :-1], off[:, 1:]
    end = after if terms.once is None else np.where(terms.once, after - before, after)
    start = before if terms.once is None else np.where(terms.once, 0.0, before)
    w, r = terms.weight, terms.per_period
    return np.asarray(w * start @ r + (1 - w) * end @ r + np.einsum("dhi,hi->dh", start, _on_moves(projection, terms)))


def _pays(terms: Terms) -> Array:
    """(K,) states whose customers pay or get something."""
    return (terms.per_period != 0) | (terms.on_move != 0).any(axis=1)


def _on_moves(projection: Projection, terms: Terms) -> Array:
    """(H, K) what a customer in a state gets on moves in a period, as expected."""
    got = np.einsum("hij,ij->hi", np.where(terms.on_move == 0, 0.0, projection.walk.flows), terms.on_move)
    return np.divide(got, projection.mean[:-1], out=np.zeros_like(got), where=projection.mean[:-1] > 0)


def _price_errors(
    projection: Projection, terms: Terms, discount: Array, size: int, rng: np.random.Generator
) -> Array:
    """(D,) money that prices drawn around their estimates add to the expected counts."""
    flows = np.einsum("h,hij->ij", discount, np.nan_to_num(projection.walk.flows))
    if terms.once is not None:
        flows = np.where(terms.once[:, None], 0.0, flows)
    units = terms.weight * flows.sum(axis=1) + (1 - terms.weight) * flows.sum(axis=0)
    assert terms.error is not None
    drawn = rng.multivariate_normal(np.zeros(len(units)), terms.error, size)
    return np.asarray(drawn @ units)
