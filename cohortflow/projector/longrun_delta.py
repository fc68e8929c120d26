"""Intervals of the long run of one chain, by the delta method (see delta.py for the scales)."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from cohortflow.errors import NotIdentified
from cohortflow.markov.derivative import remaining_mix_derivative, retention_derivative, stationary_derivative
from cohortflow.markov.exit_derivative import exit_probability_derivative, settled_base_derivative
from cohortflow.projector.accept import Array
from cohortflow.projector.delta import Spread, interval
from cohortflow.projector.longrun_figures import figures
from cohortflow.projector.prospect import Prospect
from cohortflow.states import ALL_LIVE

Key = tuple[str, str, str, str]
Limits = dict[Key, tuple[float, float]]


def delta_limits(at: Prospect, spread: Spread, rate_error: float) -> Limits:
    """key -> (low, high) of every figure with a derivative; rate_error: relative variance of the joiners."""
    found: Limits = {}
    for number, (group, _) in enumerate(at.groups, start=1):
        found.update(_group(at, list(group), f"group {number}", spread))
    if at.schedule.states.exits and not at.chain.clouded.any():
        found.update(_remaining(at, spread))
        found.update(_exit_split(at, spread))
    if at.joiners is not None:
        found.update(_settled(at, at.joiners, spread, rate_error))
    return _matched(at, found)


def _matched(at: Prospect, found: Limits) -> Limits:
    """Only figures of the table, under their own notes; the limit of a single group is that group's law."""
    out: Limits = {}
    alone = at.verdict == "unique_limit"
    for figure in figures(at):
        pair = found.get((figure.measure, figure.state, figure.origin, ""))
        if alone and figure.measure in ("limit_from_start", "time_average"):
            pair = found.get(("stationary_share", figure.state, "group 1", ""))
        if pair is not None and np.isfinite(figure.value):
            out[figure.key] = pair
    return out


def _group(at: Prospect, group: list[int], origin: str, spread: Spread) -> Limits:
    """Stationary shares (logit) and return times (log) within one closed group."""
    names, block = at.schedule.states.names, np.ix_(group, group)
    if len(group) == 1:
        return {}
    slope = stationary_derivative(at.chain.P[block])
    out: Limits = {}
    for t, state in enumerate(group):
        variance = spread.variance(_wide(slope.gradient(t), group, len(names)))
        share = slope.value[t]
        out["stationary_share", names[state], origin, ""] = _pair(share, variance, spread, "logit")
        low, high = _pair(1 / share, variance / share**4, spread, "log")
        out["return_time", names[state], names[state], ""] = (low, high)
    return out


def _remaining(at: Prospect, spread: Spread) -> Limits:
    states = at.schedule.states
    inside = np.flatnonzero(at.chain.inside).tolist()
    Q = at.chain.P[np.ix_(inside, inside)]
    try:
        kept, mix = retention_derivative(Q), remaining_mix_derivative(Q)
    except NotIdentified:
        return {}
    out: Limits = {}
    variance = spread.variance(_wide(kept.gradient(), inside, len(states)))
    out["remaining_retention", "", "", ""] = _pair(kept.value[0], variance, spread, "logit")
    for t, state in enumerate(inside):
        variance = spread.variance(_wide(mix.gradient(t), inside, len(states)))
        out["remaining_mix", states.names[state], "", ""] = _pair(mix.value[t], variance, spread, "logit")
    return out


def _exit_split(at: Prospect, spread: Spread) -> Limits:
    """Where everybody leaves, the limit from a start is the split over the exits."""
    if at.verdict != "exits_only" or len(at.chain.exits) < 2:
        return {}
    out: Limits = {}
    inside = at.chain.inside
    for state in at.chain.exits:
        slope = exit_probability_derivative(at.chain.P, at.chain.exits, exit=state)
        for origin, law in at.starts.items():
            weights = law[inside]
            variance = spread.variance(slope.along(weights))
            pair = _pair(float(weights @ slope.value), variance, spread, "logit")
            out["limit_from_start", at.schedule.states.names[state], origin, ""] = pair
    return out


def _settled(at: Prospect, joiners: Array, spread: Spread, rate_error: float) -> Limits:
    states = at.schedule.states
    if not states.exits:
        return {}
    try:
        slope = settled_base_derivative(at.chain.P, at.chain.exits, joiners)
    except NotIdentified:
        return {}
    out: Limits = {}
    inside = np.flatnonzero(at.chain.inside)
    for name, weights in _sums(at, inside):
        value = float(weights @ slope.value)
        variance = spread.variance(slope.along(weights)) + rate_error * value**2
        out["settled_base", name, "", ""] = _pair(value, variance, spread, "log")
    whole, total = slope.along(np.ones(len(inside))), float(slope.value.sum())
    for t, state in enumerate(inside if total > 0 else []):
        share = float(slope.value[t]) / total
        variance = spread.variance((slope.gradient(t) - share * whole) / total)
        out["settled_mix", states.names[state], "", ""] = _pair(share, variance, spread, "logit")
    return out


def _sums(at: Prospect, inside: Array) -> Iterator[tuple[str, Array]]:
    states = at.schedule.states
    for t, state in enumerate(inside):
        yield states.names[state], np.eye(len(inside))[t]
    yield ALL_LIVE, states.live_mask[inside].astype(float)


def _pair(value: float, variance: float, spread: Spread, scale: str) -> tuple[float, float]:
    low, high = interval(np.array([value]), np.array([variance]), spread.quantile, scale)
    return float(low[0]), float(high[0])


def _wide(gradient: Array, members: list[int], size: int) -> Array:
    """A gradient over some states at its place among all K."""
    out = np.zeros((size, size))
    out[np.ix_(members, members)] = gradient
    return out
