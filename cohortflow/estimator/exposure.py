"""Rates from spells with exact dates: moves counted, over time spent.

    q_ij = N_ij / T_i         limits: Garwood's exact Poisson interval of N_ij, over T_i
    clustered: score s_cij = N_cij - q_ij T_ci,  Var q_ij = G/(G-1) sum_c s_cij^2 / T_i^2, on the log scale

Censored spells stay in T_i. Source: Garwood (1936) Biometrika 28, 437.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.exact_rates import ExactRates, closed, state_codes
from cohortflow.estimator.interval import check_level
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[np.float64]

COLUMNS = ("state", "next_state", "exposure")


def garwood(n: ArrayLike, *, level: float = 0.95) -> tuple[Array, Array]:
    """Exact limits of a Poisson mean from a count: (chi2^-1(a/2; 2n)/2, chi2^-1(1-a/2; 2n+2)/2).

    >>> low, high = garwood([0, 5, 100])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.0, 1.6235, 81.364], [3.6889, 11.6683, 121.6268])
    """
    check_level(level)
    counts = np.asarray(n, dtype=float)
    tail = (1 - level) / 2
    low = np.where(counts > 0, stats.chi2.ppf(tail, np.maximum(2 * counts, 1e-9)) / 2, 0.0)
    return low, stats.chi2.isf(tail, 2 * counts + 2) / 2


def rates_from_spells(
    spells: Tally | pd.DataFrame,
    states: States | None = None,
    *,
    level: float = 0.95,
    clustered: bool = False,
    unit: str = "day",
) -> ExactRates:
    """Rates from a Tally (its table `spells`, in days) or a frame of spells.

    A frame has one row a spell: state, next_state (missing = not ended), exposure (time spent), and for
    `clustered` also customer. CallError for missing columns, unknown states or negative time; NotIdentified
    when a state was left but no time was spent in it, or with `clustered` when there is one customer only.

    >>> states = States(["on", "paused", "off"], exits=["off"])
    >>> spells = pd.DataFrame({"state": ["on", "on", "paused"], "next_state": ["paused", None, "off"],
    ...                        "exposure": [30.0, 60.0, 10.0]})
    >>> rates_from_spells(spells, states).Q.round(3).tolist()
    [[-0.011, 0.011, 0.0], [0.0, -0.1, 0.1], [0.0, 0.0, 0.0]]
    """
    if isinstance(spells, Tally):
        states, table = spells.states, spells.table("spells")
        rows = table.rename(columns={"days": "exposure", "bucket": "customer"})
    else:
        if states is None:
            raise CallError("rates_from_spells needs the States of a frame of spells; pass states=.")
        rows = _coded(spells, states)
    size = len(states)
    events, exposure = _sums(rows, size)
    moves = states.allowed & ~np.eye(size, dtype=bool) & (exposure > 0)[:, None]
    stray = np.argwhere((events > 0) & ~moves)
    if len(stray):
        a, b = (states.names[k] for k in stray[0])
        raise NotIdentified(
            f'Spells of "{a}" ended in "{b}" without time spent there, or the move is declared impossible; '
            "correct the spells or the declaration."
        )
    time = np.where(exposure > 0, exposure, np.nan)[:, None]
    rates = np.where(moves, events / time, 0.0)
    low, high = (np.where(moves, side / time, 0.0) for side in garwood(events, level=level))
    variance = np.divide(1.0, events, out=np.zeros_like(events), where=events > 0)
    covariance = np.diag(np.where(moves, variance, 0.0).ravel())
    if clustered:
        covariance = _clustered(rows, rates, exposure, moves)
        z = float(special.ndtri((1 + level) / 2))
        wide = np.exp(z * np.sqrt(np.diag(covariance))).reshape(size, size)
        seen = events > 0
        low, high = np.where(seen, rates / wide, low), np.where(seen, rates * wide, high)
    notes = tuple(f"no_exposure:{n}" for n in states.remaining if exposure[states.index(n)] == 0)
    method = "exposure_clustered" if clustered else "exposure"
    return ExactRates(
        states, closed(rates), moves, events, exposure, covariance, low, high, level, unit, method, notes
    )


def _coded(spells: pd.DataFrame, states: States) -> pd.DataFrame:
    missing = [c for c in COLUMNS if c not in spells.columns]
    if missing:
        raise CallError(f"Spells need the columns {', '.join(COLUMNS)}; {', '.join(missing)} is missing.")
    exposure = spells["exposure"].to_numpy(float)
    if not np.isfinite(exposure).all() or (exposure < 0).any():
        raise CallError("The exposure of a spell is a time of 0 or more; some are negative or missing.")
    state, target = (state_codes(spells[c], states) for c in ("state", "next_state"))
    if (state < 0).any():
        raise CallError("Every spell is spent in a state; some have none.")
    out = pd.DataFrame({"state": state, "exposure": exposure, "n": 1, "next_state": target})
    out["customer"] = pd.factorize(spells["customer"])[0] if "customer" in spells else 0
    return out


def _sums(rows: pd.DataFrame, size: int) -> tuple[Array, Array]:
    events, ended = np.zeros((size, size)), rows["next_state"].to_numpy() >= 0
    np.add.at(
        events,
        (rows["state"].to_numpy()[ended], rows["next_state"].to_numpy()[ended]),
        rows["n"].to_numpy()[ended],
    )
    return events, np.bincount(rows["state"], rows["exposure"], minlength=size).astype(float)


def _clustered(rows: pd.DataFrame, rates: Array, exposure: Array, moves: NDArray[np.bool_]) -> Array:
    """(K*K, K*K) sandwich covariance of the logs of the rates."""
    size = len(rates)
    _, who = np.unique(rows["customer"], return_inverse=True)
    groups = int(who.max()) + 1
    if groups < 2:
        raise NotIdentified("Clustered limits compare customers, and there is one (or none is named).")
    score = np.zeros((groups, size, size))
    state, target = rows["state"].to_numpy(), rows["next_state"].to_numpy()
    ended = target >= 0
    np.add.at(score, (who[ended], state[ended], target[ended]), rows["n"].to_numpy()[ended])
    time: Any = np.zeros((groups, size))
    np.add.at(time, (who, state), rows["exposure"].to_numpy())
    score -= rates[None] * time[:, :, None]
    scale = np.where(moves & (rates > 0), rates * exposure[:, None], np.inf)
    flat = (score / scale).reshape(groups, -1)
    return flat.T @ flat * groups / (groups - 1)
