"""Intervals of derived quantities: the delta method on a scale where the error is nearly symmetric.

    log    exp(log v -+ q s/v)                    times, counts, values above 0
    logit  expit(logit v -+ q s/(v(1-v)))         shares and probabilities
    plain  v -+ q s

s^2 = gradient' Cov gradient; q is Student's quantile with the covariance's own degrees of freedom.
From draws: quantiles over the draws, with infinities kept; never the mean of drawn lifetimes.
Source: Cramer (1946), Mathematical Methods of Statistics, ch. 28.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from cohortflow.chain import Draws
from cohortflow.errors import CallError, listed, nearest
from cohortflow.markov.gradient import Derivative, delta_variance
from cohortflow.projector import accept
from cohortflow.projector.accept import Array

SCALES = ("log", "logit", "plain")


@dataclass(frozen=True, eq=False)
class Spread:
    """Covariance (K*K, K*K) of a matrix of rates, its degrees of freedom and the level asked for."""

    covariance: Array
    df: float
    level: float

    @classmethod
    def of(cls, covariance: Any, size: int, level: float) -> Spread:
        """From an object with `.matrix` and `.df`; rows without data (NaN) have no say."""
        matrix = np.nan_to_num(np.asarray(covariance.matrix, dtype=float))
        if matrix.shape != (size * size, size * size):
            raise CallError(
                f"covariance.matrix has shape {matrix.shape}; for {size} states it must be "
                f"({size * size}, {size * size}), indexed by from x {size} + to."
            )
        return cls(matrix, float(covariance.df), level)

    @property
    def quantile(self) -> float:
        """Two-sided quantile of Student's t (normal when df is infinite)."""
        if np.isinf(self.df):
            return float(special.ndtri((1 + self.level) / 2))
        return float(special.stdtrit(self.df, (1 + self.level) / 2))

    def variance(self, gradient: Array) -> float:
        """Of a number with this (K, K) gradient; NaN where the gradient is."""
        return delta_variance(gradient, self.covariance) if np.isfinite(gradient).all() else np.nan

    def intervals(self, derivative: Derivative, scale: str) -> tuple[Array, Array]:
        """(T,) low and high of the derivative's targets."""
        variance = [self.variance(derivative.gradient(t)) for t in range(len(derivative.value))]
        return interval(derivative.value, np.array(variance), self.quantile, scale)


@dataclass(frozen=True, eq=False)
class Doubt:
    """What is known of the error of a model's rates: a covariance (one chain), else draws, else nothing."""

    spread: Spread | None
    draws: Draws | None
    level: float

    @property
    def method(self) -> str:
        """delta | draws | none."""
        return "delta" if self.spread is not None else "none" if self.draws is None else "draws"


def doubt_of(
    model: Any, covariance: Any, draws: Draws | int, rng: int | np.random.Generator, level: float
) -> Doubt:
    """From what a call was given and what a Fit brings: see accept.covariance_of and accept.draws_of."""
    size = len(accept.as_schedule(model).states)
    found = accept.covariance_of(model, covariance)
    if found is not None:
        return Doubt(Spread.of(found, size, accept.as_level(level)), None, level)
    return Doubt(None, accept.draws_of(model, draws, accept.as_rng(rng), covariance), accept.as_level(level))


def interval(value: Array, variance: Array, quantile: float, scale: str) -> tuple[Array, Array]:
    """(low, high) on a scale; NaN where the value is not inside the scale's range or the variance is unknown.

    >>> low, high = interval(np.array([20.0]), np.array([4.0]), 2.0, "log")
    >>> low.round(3), high.round(3)  # 20 exp(-+ 2 x 2/20)
    (array([16.375]), array([24.428]))
    """
    if scale not in SCALES:
        raise CallError(f'Unknown scale "{scale}"{nearest(scale, SCALES)}. Allowed: {listed(SCALES)}.')
    value, step = np.asarray(value, dtype=float), quantile * np.sqrt(np.maximum(variance, 0.0))
    if scale == "plain":
        return value - step, value + step
    inside = np.isfinite(value) & (value > 0) & (np.isfinite(step)) & ((scale == "log") | (value < 1))
    v, s = np.where(inside, value, 0.5), np.where(inside, step, 0.0)
    if scale == "log":
        low, high = v * np.exp(-s / v), v * np.exp(s / v)
    else:
        low, high = (special.expit(special.logit(v) + sign * s / (v * (1 - v))) for sign in (-1, 1))
    return np.where(inside, low, np.nan), np.where(inside, high, np.nan)


def quantiles(values: Array, level: float) -> tuple[Array, Array]:
    """(low, high) over draws (axis 0), infinities kept as values; NaN where any draw is undefined.

    >>> quantiles(np.array([[1.0], [2.0], [3.0], [np.inf]]), 0.5)
    (array([1.]), array([3.]))
    """
    bad = np.isnan(values).any(axis=0)
    safe = np.where(bad, 0.0, values)
    low, high = np.quantile(safe, [(1 - level) / 2, (1 + level) / 2], axis=0, method="inverted_cdf")
    return np.where(bad, np.nan, low), np.where(bad, np.nan, high)
