"""Where a projection may end up: simulated bands in four named parts, and their exact mean and covariance.

    rates          the rates are estimates: every draw has its own matrices (Draws of the estimator)
    chance         the base is finite: moves are multinomial, new customers fall into states by lot
    common_shocks  future periods differ, for everybody at once: matrices of a draw vary by period
    joiners        how many join and return, and into which states, is a forecast

Given matrices P_h and inflow with mean j and covariance W (numbers and split apart), over expanded states:

    m_{h+1} = m_h P_h + j_{h+1}
    C_{h+1} = P_h' C_h P_h + sum_i m_hi (diag p_i - p_i p_i')     chance, p_i the rows of P_h
    J_{h+1} = P_h' J_h P_h + split noise + sum_kl extra_kl a_k a_l'     joiners, a_k their law walked on

Source: Pollard (1966) Biometrika 53, 397; Bartholomew (1982), Stochastic Models for Social Processes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import block_diag

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.projector.accept import Array
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.mix import filled

PARTS = ("rates", "chance", "common_shocks", "joiners")


def check_parts(parts: Sequence[str]) -> tuple[str, ...]:
    """Known parts, each once, in the fixed order.

    >>> check_parts(["chance", "rates"])
    ('rates', 'chance')
    """
    for part in parts:
        if part not in PARTS:
            raise CallError(f'Unknown part "{part}"{nearest(part, PARTS)}. The parts are {listed(PARTS)}.')
    return tuple(p for p in PARTS if p in parts)


def simulate(
    schedule: Schedule,
    start: Array,
    periods: int,
    *,
    size: int,
    rng: np.random.Generator,
    draws: Draws | None = None,
    joiners: Joiners | None = None,
    chance: bool = True,
    joiners_vary: bool = True,
    first_step: int = 0,
) -> Array:
    """Simulated customers by state, shape (size, periods + 1, K); exits: lost since the opening.

    draws : its size must be `size`; its matrices take the place of the schedule's
    chance : moves of whole customers are multinomial; fractions of a customer move as expected
    joiners_vary : numbers and entry states of joiners are drawn; else as expected
    """
    arriving = _arrivals(schedule, joiners, periods, size, rng, joiners_vary)
    laws = _laws(schedule, draws, "start")
    parts = _placed(np.tile(start, (size, 1)), laws, rng, chance)
    out = np.zeros((size, periods + 1, len(schedule.states)))
    collapse = [c.collapse(len(schedule.states)) for c in schedule.components]
    out[:, 0] = sum(x @ c for x, c in zip(parts, collapse, strict=True))
    join = _laws(schedule, draws, "join")
    for h in range(periods):
        new = None if arriving is None else _placed(arriving[:, h], join, rng, chance)
        for c in range(len(parts)):
            matrices = _matrices(schedule, draws, c, first_step + h, h)
            parts[c] = _moved(parts[c], matrices, rng) if chance else _expected(parts[c], matrices)
            if new is not None:
                parts[c] = parts[c] + new[c]
        out[:, h + 1] = sum(x @ c for x, c in zip(parts, collapse, strict=True))
    return out


@dataclass(frozen=True, eq=False)
class Moments:
    """Exact mean and covariance at the central matrices, over declared states.

    mean : (H+1, K);  chance, joiners : (H+1, K, K) covariance from each of the two parts
    """

    mean: Array
    chance: Array
    joiners: Array


def moments(
    schedule: Schedule, start: Array, periods: int, *, joiners: Joiners | None = None, first_step: int = 0
) -> Moments:
    """Exact mean and covariance of the customers by state, the rates being given (see the module text)."""
    laws = [np.hstack([getattr(c, side) for c in schedule.components]) for side in ("start", "join")]
    size = len(schedule.states)
    fold = np.vstack([c.collapse(size) for c in schedule.components])
    mean, C = start @ laws[0], _lot(start, laws[0])
    J, walked = (
        np.zeros_like(C),
        {} if joiners is None else {k: np.zeros((0, len(fold))) for k in joiners.inflows},
    )
    rows = [(mean, C, J)]
    for h in range(periods):
        P = block_diag(*(filled(c.matrix(first_step + h)) for c in schedule.components))
        C = P.T @ C @ P + _lot(mean, P)
        mean, J = mean @ P, P.T @ J @ P
        spread = np.zeros_like(J)
        for kind, inflow in ({} if joiners is None else joiners.inflows).items():
            mean = mean + inflow.expected[h] @ laws[1]
            C = C + _lot(inflow.expected[h], laws[1])
            J = J + laws[1].T @ inflow.state_noise()[h] @ laws[1]
            walked[kind] = np.vstack([walked[kind] @ P, inflow.mix[h] @ laws[1]])
            # the Poisson part of the numbers is independent over periods, so it walks on inside J
            J = J + inflow.mean[h] * np.outer(walked[kind][-1], walked[kind][-1])
            spread = spread + walked[kind].T @ inflow.extra[: h + 1, : h + 1] @ walked[kind]
        rows.append((mean, C, J + spread))
    return Moments(
        np.array([m @ fold for m, _, _ in rows]),
        np.array([fold.T @ c @ fold for _, c, _ in rows]),
        np.array([fold.T @ j @ fold for _, _, j in rows]),
    )


def drawn_means(
    draws: Draws, start: Array, periods: int, *, inflow: Array | None = None, first_step: int = 0
) -> Array:
    """Expected customers by state under each draw's rates, (D, periods + 1, K); inflow (H, K) as expected."""
    schedule = draws.schedule
    fold = [c.collapse(len(schedule.states)) for c in schedule.components]
    parts = [np.broadcast_to(start @ law, (draws.size, law.shape[-1])) for law in draws.start]
    out = [sum(x @ f for x, f in zip(parts, fold, strict=True))]
    for h in range(periods):
        for c, join in enumerate(draws.join):
            moved = _expected(parts[c], _matrices(schedule, draws, c, first_step + h, h))
            parts[c] = moved if inflow is None else moved + inflow[h] @ join
        out.append(sum(x @ f for x, f in zip(parts, fold, strict=True)))
    return np.stack(out, axis=1)


def quantile_band(values: Array, level: float) -> Array:
    """(2, ...) quantiles over draws (axis 0) around the median; NaN where any draw is."""
    bad = np.isnan(values).any(axis=0)
    out = np.quantile(np.where(bad, 0.0, values), [(1 - level) / 2, (1 + level) / 2], axis=0)
    return np.where(bad, np.nan, out)


def _lot(counts: Array, laws: Array) -> Array:
    """Covariance of customers thrown by the rows of `laws`: sum_i n_i (diag p_i - p_i p_i')."""
    return np.diag(counts @ laws) - (laws * counts[:, None]).T @ laws


def _laws(schedule: Schedule, draws: Draws | None, side: str) -> list[Array]:
    """(D or 1, K, m) start or join laws, one a component."""
    if draws is not None:
        return [np.asarray(law) for law in getattr(draws, side)]
    return [getattr(c, side)[None] for c in schedule.components]


def _matrices(schedule: Schedule, draws: Draws | None, component: int, step: int, ahead: int) -> Array:
    """(D or 1, m, m) matrices of a step; draws of future shocks count from the base period."""
    if draws is None:
        return filled(schedule.components[component].matrix(step))[None]
    return filled(draws.matrix(component, ahead if "common shocks" in draws.part else step))


def _arrivals(
    schedule: Schedule,
    joiners: Joiners | None,
    periods: int,
    size: int,
    rng: np.random.Generator,
    vary: bool,
) -> Array | None:
    """(size, H, K) joiners and returners, drawn or as expected."""
    if joiners is None or not joiners.expected().any():
        return None
    if vary:
        return joiners.draw(size, rng)[:, :periods]
    return np.broadcast_to(joiners.expected()[:periods], (size, periods, len(schedule.states)))


def _placed(counts: Array, laws: list[Array], rng: np.random.Generator, chance: bool) -> list[Array]:
    """Customers by declared state (D, K) thrown into the expanded states: one (D, m) a component."""
    sizes = np.cumsum([law.shape[-1] for law in laws])[:-1]
    draws = max(len(law) for law in laws)
    joint = np.concatenate([np.broadcast_to(law, (draws, *law.shape[1:])) for law in laws], axis=-1)
    thrown = _moved(counts, joint, rng) if chance else _expected(counts, joint)
    return np.split(thrown, sizes, axis=1)


def _expected(counts: Array, laws: Array) -> Array:
    """counts (D, a) through laws (D or 1, a, b)."""
    if len(laws) == 1:
        return counts @ laws[0]
    return np.matmul(counts[:, None, :], laws)[:, 0]


def _moved(counts: Array, laws: Array, rng: np.random.Generator) -> Array:
    """Whole customers by multinomial lot, fractions as expected; (D, a) through (D or 1, a, b)."""
    whole = np.floor(counts + 1e-9)
    out = (
        _expected(counts - whole, laws)
        if (counts != whole).any()
        else np.zeros((len(counts), laws.shape[-1]))
    )
    for row in range(counts.shape[1]):
        law = laws[:, row]
        where = np.flatnonzero(law.any(axis=0))
        if len(where) == 1:
            out[:, where[0]] += whole[:, row]
        elif whole[:, row].any():
            kept = law[:, where] / law[:, where].sum(axis=1, keepdims=True)
            out[:, where] += rng.multinomial(whole[:, row].astype(np.int64), kept)
    return out
