"""Forecasts of how many join and return: nobody, constant, last year's, exponential smoothing, a plan.

Every method gives the expected number of each period, and the covariance of its rate beyond Poisson chance:

    constant   mean y of the last n periods; Cov = e 1{h=k} + max(s^2, y) / n,  e = (s^2 - y)+ by period,
               s^2 widened by (n-1)/(n-3), the variance of Student's law with n-1 degrees of freedom
    last_year  y of the same place a cycle ago; errors as past ones were: with m^2 the square of the growth
               log (sum y_t / sum y_{t-c}) less its noise, v the relative variance around that growth beyond
               Poisson's, and g cycles ahead,  Cov = y_h y_k (g_h g_k m^2 + 1{h=k} g_h v) + 1{h=k} y_h
    smoothing  additive damped trend (and season, from two cycles on) on log y, fitted by maximum likelihood;
               Cov of log y_{T+h}: sigma^2 Psi Psi', Psi the weights of past errors
    planned    the plan is the expected number, joining at random (Poisson)

Sources: Hyndman, Koehler, Ord & Snyder (2008), Forecasting with Exponential Smoothing, ch. 6.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, NotIdentified, listed, nearest
from cohortflow.periods import Calendar
from cohortflow.projector.accept import Array, as_periods
from cohortflow.projector.joiners import INFLOWS, Inflow, Joiners, given, nobody
from cohortflow.states import States
from cohortflow.tally import Tally

METHODS = ("none", "constant", "last_year", "smoothing", "planned")
CONSTANT_WINDOW = 12
LEAST_ERRORS = 3
LEAST_SMOOTHED = 8
PLAN_COLUMNS = ("period", "kind", "state", "customers")


def joiner_forecast(
    tally: Tally, periods: int, *, method: str = "last_year", window: int | None = None, plan: Any = None
) -> Joiners:
    """Joiners and returners of the `periods` after the tally's last one, forecast separately.

    method : none | constant | last_year | smoothing | planned
    window : for constant, periods averaged (default: one cycle of seasons);  plan : for planned, rows with
        period, kind (joined or returned), state, customers

    The split over entry states is pooled over the last cycle, kept apart from the number; it varies from
    period to period as it did there (Dirichlet). Raises NotIdentified when the history is too short.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> joiner_forecast(tally, 2, method="constant").inflows["joined"].mean  # one new customer in two periods
    array([0.5, 0.5])
    """
    if method not in METHODS:
        raise CallError(f'Unknown method "{method}"{nearest(method, METHODS)}. Allowed: {listed(METHODS)}.')
    steps, base, calendar = as_periods(periods), tally.meta.last, tally.calendar
    if method == "none":
        return nobody(tally.states, calendar, base, steps)
    if method == "planned":
        return planned(tally.states, plan, steps, calendar=calendar, base=base)
    inflows = {}
    for kind in INFLOWS:
        counts = _seen(tally, kind)
        mean, extra = _forecast(method, counts.sum(axis=1).astype(float), steps, calendar, window, kind)
        inflows[kind] = _with_mix(counts, mean, extra, tally.states, calendar.cycle)
    return Joiners(tally.states, calendar, base, method, inflows)


def planned(states: States, plan: Any, periods: int, *, calendar: Calendar, base: int) -> Joiners:
    """Joiners from a plan: rows of period, kind, state, customers (a DataFrame, say), for every period.

    >>> months = Calendar("month")
    >>> row = {"kind": "joined", "state": "fresh", "customers": 40}
    >>> rows = [{"period": "2026-10", **row}, {"period": "2026-11", **row}]
    >>> states = States(["fresh", "left"], exits=["left"])
    >>> planned(states, rows, 2, calendar=months, base=months.parse("2026-09")).expected()[:, 0]
    array([40., 40.])
    """
    if plan is None:
        raise CallError(f"method planned needs plan=, rows with {listed(PLAN_COLUMNS)}.")
    frame = pd.DataFrame(plan)
    missing = [c for c in PLAN_COLUMNS if c not in frame]
    if missing:
        raise CallError(f"The plan lacks the columns {listed(missing)}; it needs {listed(PLAN_COLUMNS)}.")
    tables = {kind: np.zeros((periods, len(states))) for kind in INFLOWS}
    seen = set()
    for row in frame.to_dict(orient="records"):
        ahead = _ordinal(row["period"], calendar) - base
        if row["kind"] not in INFLOWS:
            raise CallError(f'The plan has the kind "{row["kind"]}"; allowed: {listed(INFLOWS)}.')
        if 1 <= ahead <= periods:
            tables[row["kind"]][ahead - 1, states.index(row["state"])] += float(row["customers"])
            seen.add(ahead)
    lacking = [calendar.label(base + h) for h in range(1, periods + 1) if h not in seen]
    if lacking:
        raise CallError(
            f"The plan says nothing about {listed(lacking)}; give a row (0 is allowed) for each period."
        )
    return Joiners(
        states, calendar, base, "planned", {k: given(states, t, periods, k) for k, t in tables.items()}
    )


def constant(numbers: Array, periods: int, window: int) -> tuple[Array, Array]:
    """(H,) mean and (H, H) covariance of the rate beyond Poisson, from the last `window` numbers.

    >>> mean, extra = constant(np.array([90.0, 100, 110, 100]), 2, 4)  # s^2 = 66.7 x 3 = 200
    >>> mean, extra.round(2).tolist()
    (array([100., 100.]), [[150.0, 50.0], [50.0, 150.0]])
    """
    used = numbers[-window:]
    n, level = len(used), used.mean()
    spread = used.var(ddof=1) if n > 1 else 0.0
    spread *= (n - 1) / (n - 3) if n > 3 else max(n - 1, 1)
    own = max(spread - level, 0.0)
    return np.full(periods, level), own * np.eye(periods) + max(spread, level) / n


def last_year(numbers: Array, periods: int, cycle: int) -> tuple[Array, Array]:
    """(H,) the numbers a cycle before, and the covariance that past repetitions were wrong by.

    >>> grows = np.array([1e6, 2e6, 1.1e6, 2.2e6, 1.21e6, 2.42e6])  # by 10 % each time
    >>> mean, extra = last_year(grows, 2, 2)
    >>> mean, (np.sqrt(extra.diagonal()) / mean).round(3)  # log 1.1
    (array([1210000., 2420000.]), array([0.095, 0.095]))
    """
    if len(numbers) < cycle + LEAST_ERRORS:
        raise NotIdentified(
            f'The method "last_year" needs one cycle of {cycle} periods and {LEAST_ERRORS} more to see how '
            f'wrong it is; the history has {len(numbers)}. Use "constant", or a plan.'
        )
    ahead = np.arange(periods)
    mean, turns = numbers[-cycle:][ahead % cycle], 1.0 + ahead // cycle
    before, after = numbers[:-cycle], numbers[cycle:]
    grown = before * max(after.sum(), 1.0) / max(before.sum(), 1.0)
    growth = np.log(max(after.sum(), 1.0) / max(before.sum(), 1.0))
    chance = grown + grown**2 / np.maximum(before, 1.0)
    spread = (after - grown) ** 2 * len(after) / (len(after) - 1) - chance
    own = max(float(spread.sum() / max((grown**2).sum(), 1.0)), 0.0)
    noise = (own * (grown**2).sum() + chance.sum()) / max(grown.sum(), 1.0) ** 2
    shared = max(growth**2 - noise, 0.0)
    return mean, np.outer(turns * mean, turns * mean) * shared + np.diag(own * turns * mean**2 + mean)


def smoothing(numbers: Array, periods: int, cycle: int) -> tuple[Array, Array]:
    """(H,) mean and (H, H) covariance of log-normal numbers, from damped exponential smoothing of their logs.

    NotIdentified when there are fewer than eight periods, or no maximum of the likelihood was found.
    """
    if len(numbers) < LEAST_SMOOTHED:
        raise NotIdentified(
            f'The method "smoothing" needs at least {LEAST_SMOOTHED} periods; the history has '
            f'{len(numbers)}. Use "constant", or a plan.'
        )
    fitted, season = _smoothed(np.log(np.maximum(numbers, 0.5)), cycle)
    ahead = np.asarray(fitted.forecast(periods), dtype=float)
    logs = error_covariance(dict(zip(fitted.model.param_names, fitted.params, strict=True)), season, periods)
    logs *= (
        float(np.mean(np.asarray(fitted.resid) ** 2))
        * len(numbers)
        / max(len(numbers) - len(fitted.params), 1)
    )
    mean = np.exp(ahead + np.diag(logs) / 2)
    return mean, _beyond_poisson(np.outer(mean, mean) * np.expm1(logs), mean)


def error_covariance(params: Mapping[str, float], season: int, periods: int) -> Array:
    """(H, H) covariance of forecast errors over sigma^2, for additive errors, damped trend and season.

    Psi is lower triangular with 1 on its diagonal and c_j below: c_j = alpha + beta (phi + .. + phi^j), and
    gamma more at every full season.

    >>> error_covariance({"smoothing_level": 0.5}, 0, 2)
    array([[1.  , 0.5 ],
           [0.5 , 1.25]])
    """
    alpha, beta = params.get("smoothing_level", 0.0), params.get("smoothing_trend", 0.0)
    gamma, phi = params.get("smoothing_seasonal", 0.0), params.get("damping_trend", 1.0)
    lag = np.arange(1, periods)
    weight = alpha + beta * np.cumsum(phi**lag)
    if season:
        weight = weight + gamma * (lag % season == 0)
    psi = np.eye(periods)
    for j, c in enumerate(weight, start=1):
        psi += c * np.eye(periods, k=-j)
    return psi @ psi.T


def _smoothed(logs: Array, cycle: int) -> tuple[Any, int]:
    from statsmodels.tsa.exponential_smoothing.ets import ETSModel

    season = cycle if cycle > 1 and len(logs) >= 2 * cycle + LEAST_ERRORS else 0
    kind = {"seasonal": "add", "seasonal_periods": season} if season else {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        fitted = ETSModel(logs, error="add", trend="add", damped_trend=True, **kind).fit(disp=False)
    if not np.isfinite(fitted.params).all() or not np.isfinite(fitted.llf):
        raise NotIdentified(
            'Exponential smoothing found no fit for these numbers. Use "constant" or "last_year".'
        )
    return fitted, season


def _seen(tally: Tally, kind: str) -> Array:
    """(T, K) stays that began, without the first periods of the log, in which everybody is new to it."""
    counts = tally.joiners(kind)[1] * ~tally.states.exit_mask
    blind = (tally.joiners("joined")[1].sum(axis=1) == 0) & (tally.joiners("unknown")[1].sum(axis=1) > 0)
    seeing = np.flatnonzero(~blind)
    return counts[seeing[0] :] if len(seeing) else counts[:0]


def _forecast(
    method: str, numbers: Array, periods: int, calendar: Calendar, window: int | None, kind: str
) -> tuple[Array, Array]:
    if not numbers.any():
        return np.zeros(periods), np.zeros((periods, periods))
    if window is not None and (method != "constant" or window < 1):
        raise CallError(
            f"window belongs to the method constant and is at least 1; got {window} for {method}."
        )
    length = window or (calendar.cycle if calendar.cycle > 1 else CONSTANT_WINDOW)
    ways: dict[str, Callable[[], tuple[Array, Array]]] = {
        "constant": lambda: constant(numbers, periods, length),
        "last_year": lambda: last_year(numbers, periods, calendar.cycle),
        "smoothing": lambda: smoothing(numbers, periods, calendar.cycle),
    }
    return ways[method]()


def _with_mix(counts: Array, mean: Array, extra: Array, states: States, cycle: int) -> Inflow:
    """The number of each period with the entry mix of the last cycle (of all if nobody joined there)."""
    recent = counts[-max(cycle, CONSTANT_WINDOW) :]
    used = recent if recent.any() else counts
    if not used.any():
        return given(states, np.zeros_like(counts[0]), len(mean), "joined")
    law = used.sum(axis=0) / used.sum()
    return Inflow(mean, extra, np.tile(law, (len(mean), 1)), _concentration(used))


def _concentration(counts: Array) -> float:
    """Of a Dirichlet law around a common mix, from the chi-square of periods by states; inf: no excess."""
    table = counts[counts.sum(axis=1) > 0][:, counts.any(axis=0)].astype(float)
    df = (table.shape[0] - 1) * (table.shape[1] - 1)
    if df <= 0:
        return np.inf
    totals = table.sum(axis=1, keepdims=True)
    expected = totals * table.sum(axis=0) / table.sum()
    excess = ((table - expected) ** 2 / expected).sum() / df - 1.0
    return np.inf if excess <= 0 else float(max((totals.mean() - 1.0) / excess - 1.0, 1.0))


def _beyond_poisson(covariance: Array, mean: Array) -> Array:
    """The covariance of the rate: Poisson chance taken out of the variances, as far as it goes."""
    own = np.minimum(mean, np.maximum(np.linalg.eigvalsh(covariance)[0], 0.0))
    return covariance - np.diag(own)


def _ordinal(period: Any, calendar: Calendar) -> int:
    return calendar.parse(period) if isinstance(period, str) else int(period)
