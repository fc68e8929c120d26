"""Projecting a base: exact means, simulated bands, and the variance that each part of a band has."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.adjust import as_adjustments, overlaid
from cohortflow.projector.bands import check_parts, drawn_means, moments, simulate
from cohortflow.projector.joiners import Joiners, nobody, planned_numbers
from cohortflow.projector.mix import walk
from cohortflow.projector.projection import Projection, nan_product
from cohortflow.record import frozen_array, frozen_mapping

DRAWS = 2000


def project(
    model: Any,
    *,
    periods: int,
    start: Any = None,
    joiners: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    level: float = 0.90,
    rng: int | np.random.Generator = 1,
    draws: Draws | int = DRAWS,
    shocks: Draws | None = None,
    parts: Sequence[str] | None = None,
    covariance: str | None = None,
    base_period: str | int | None = None,
    adjustments: Iterable[Any] = (),
    segment: str = "all",
) -> Projection:
    """Project a base: expected customers by state (exact), with bands from simulation.

        x_{h+1} = x_h P_h + joiners_{h+1} + returners_{h+1}

    Parameters
    ----------
    model : a Fit (brings opening counts, draws of its rates, the calendar), a Chain or a Schedule
    periods : H, how far
    start : customers by state at the end of the base period (default: the last mix of the Fit's tally)
    joiners : Joiners, or numbers a period by state; None: a closed base
    totals : named sums of states that get their own band, beside `all_live`
    level : of the bands;  rng : seed or Generator
    draws : how many, or Draws made before;  covariance : which kind the Fit draws from
    shocks : Draws with matrices for each period ahead ("common_shocks"); they hold the rates part as well,
        told apart by their own `.rates` where they have it, else by the draws of the model
    parts : which of rates, chance, common_shocks, joiners make the band; default: all that are known
    base_period : label or ordinal, where the Fit or the start does not tell
    adjustments : (period, state, customers) laid over by hand, a line of their own in the roll-forward

    Raises CallError for unusable arguments. A state that can be reached from one without data is NaN.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> ahead = project(chain, start={"fresh": 100}, periods=2, joiners={"fresh": 50})
    >>> ahead.mean
    array([[100.,   0.,   0.],
           [ 50.,  80.,  20.],
           [ 50., 112.,  38.]])
    """
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "A projection")
    states, steps = schedule.states, accept.as_periods(periods)
    counts = accept.opening(model, start, states)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    generator = accept.as_rng(rng)
    coming = as_joiners(joiners, schedule, base, steps)
    paired = getattr(shocks, "rates", None)
    drawn = paired if isinstance(paired, Draws) else accept.draws_of(model, draws, generator, covariance)
    chosen = _choose_parts(parts, drawn, shocks, coming)
    weights = accept.weights_of(states, totals)
    added = as_adjustments(adjustments, schedule, base, steps)
    central = walk(schedule, counts, steps, coming.expected(), first_step=first)
    central, overlay = overlaid(central, schedule, added, first)
    simulated = simulate(
        schedule,
        counts,
        steps,
        size=_size(draws, drawn, shocks if "common_shocks" in chosen else None),
        rng=generator,
        draws=shocks if "common_shocks" in chosen else drawn if "rates" in chosen else None,
        joiners=coming,
        chance="chance" in chosen,
        joiners_vary="joiners" in chosen,
        first_step=first,
    )
    simulated = np.maximum(simulated + overlay, 0.0)
    simulated[:, central.undefined] = np.nan
    spread = _variances(schedule, counts, steps, coming, drawn, shocks, chosen, weights, first)
    for values in spread.values():
        values[np.isnan(_by_quantity(central.counts, weights, states.exit_mask))] = np.nan
    return Projection(
        schedule, coming, base, accept.as_level(level), chosen, central, frozen_array(simulated),
        frozen_mapping(weights), frozen_mapping(spread), added, segment,
        tuple(f"rows_without_data:{s}" for s in schedule.unknown),
    )  # fmt: skip


def as_joiners(joiners: Any, schedule: Schedule, base: int | None, periods: int) -> Joiners:
    """Joiners as a record, cut to the periods asked for; None is nobody, numbers are taken as planned."""
    if joiners is None:
        return nobody(schedule.states, schedule.calendar, base, periods)
    if isinstance(joiners, Joiners):
        if joiners.states.names != schedule.states.names:
            raise CallError("The joiners and the model have different states; forecast them from one tally.")
        if base is not None and joiners.base is not None and joiners.base != base:
            raise CallError(
                f"The joiners are forecast from {schedule.calendar.label(joiners.base)}, the base is counted "
                f"in {schedule.calendar.label(base)}; both must start from one period."
            )
        return joiners.cut(periods)
    return planned_numbers(schedule.states, joiners, periods=periods, calendar=schedule.calendar, base=base)


def _choose_parts(
    parts: Sequence[str] | None, drawn: Draws | None, shocks: Draws | None, joiners: Joiners
) -> tuple[str, ...]:
    known = {"rates": drawn is not None or shocks is not None, "chance": True}
    known |= {"common_shocks": shocks is not None, "joiners": bool(joiners.expected().any())}
    if parts is None:
        return tuple(part for part, available in known.items() if available)
    chosen = check_parts(parts)
    if "rates" in chosen and not known["rates"]:
        raise CallError(
            'The part "rates" needs to know how uncertain the rates are: project a Fit, or pass draws=.'
        )
    if "common_shocks" in chosen and shocks is None:
        raise CallError('The part "common_shocks" needs draws of future periods: pass shocks=.')
    if "common_shocks" in chosen and "rates" not in chosen:
        raise CallError('Draws of shocks hold the error of the rates as well; name the part "rates" too.')
    return chosen


def _size(draws: Draws | int, drawn: Draws | None, shocks: Draws | None) -> int:
    if shocks is not None:
        return shocks.size
    if drawn is not None:
        return drawn.size
    if isinstance(draws, (Draws, bool)) or draws < 2:
        raise CallError(f"draws is {draws!r}; it takes Draws, or a whole number of draws, at least 2.")
    return int(draws)


def _variances(
    schedule: Schedule,
    counts: Array,
    periods: int,
    joiners: Joiners,
    drawn: Draws | None,
    shocks: Draws | None,
    chosen: tuple[str, ...],
    weights: Mapping[str, Array],
    first: int,
) -> dict[str, Array]:
    """part -> (H+1, Q) variances: chance and joiners exact, rates and shocks over the draws' means."""
    exits = schedule.states.exit_mask
    exact = moments(schedule, counts, periods, joiners=joiners, first_step=first)
    over = {
        name: _by_quantity(
            drawn_means(d, counts, periods, inflow=joiners.expected(), first_step=first), weights, exits
        ).var(axis=0, ddof=1)
        for name, d in (("rates", drawn), ("both", shocks))
        if d is not None
    }
    rates = over.get("rates", over.get("both"))
    found = {
        "rates": rates,
        "chance": _quadratic(exact.chance, weights, exits),
        "common_shocks": np.maximum(over["both"] - rates, 0.0) if "both" in over else None,
        "joiners": _quadratic(exact.joiners, weights, exits),
    }
    none = np.zeros_like(found["chance"])
    return {part: np.array(value) if part in chosen else none.copy() for part, value in found.items()}


def _columns(weights: Mapping[str, Array], exits: Array) -> Array:
    """(K, Q) weights of every quantity, the exits last."""
    return np.column_stack([*weights.values(), *np.eye(len(exits))[exits]])


def _by_quantity(values: Array, weights: Mapping[str, Array], exits: Array) -> Array:
    """(..., K) to (..., Q)."""
    return np.stack([nan_product(values, w) for w in _columns(weights, exits).T], axis=-1)


def _quadratic(covariance: Array, weights: Mapping[str, Array], exits: Array) -> Array:
    """(H+1, K, K) to (H+1, Q) variances."""
    w = _columns(weights, exits)
    return np.maximum(np.einsum("kq,hkl,lq->hq", w, covariance, w), 0.0)
