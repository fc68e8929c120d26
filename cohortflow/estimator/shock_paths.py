"""Future rates with shocks: conditional simulation of the law of shocks.py, given the past.

Pooled rates average over the months that were seen, shocks included. So what a future period adds is

    log-weight(T+h) - log pooled = (s_{T+h} - mean of s over the window) - (variance within the window) / 2,
    s_ijt = f_t 1{j is an exit} + e_ijt

drawn from its law given the counts; the last term keeps the average rate where it is (the mean of an
exponential is not the exponential of the mean). The sampling error of the pooled rates comes from the model's
own draws, so that zeros, customers who differ, and every model's expanded states are handled there.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.errors import CallError
from cohortflow.estimator.draws import generator
from cohortflow.estimator.fit import Fit, fit
from cohortflow.estimator.shock_rows import Whitened
from cohortflow.estimator.shocks import PERSISTENCES, SIZES, Shocks, correlation, estimate_shocks
from cohortflow.estimator.window import choose_window, plain_rows
from cohortflow.record import frozen_array
from cohortflow.tally import Tally

Array = NDArray[np.float64]


class ShakenDraws(Draws):
    """Draws whose matrices are rates times shocks, made when asked for: (D, H, m, m) can be large.

    rates : Draws of the rates;  shift : (D, H, K, K) log-weights added to the moves of each step ahead
    """

    rates: Draws
    shift: Array

    def __init__(self, rates: Draws, shift: Array) -> None:
        values = {"schedule": rates.schedule, "start": rates.start, "join": rates.join, "rates": rates}
        values |= {"shift": frozen_array(shift), "part": "rates and common shocks"}
        for name, value in values.items():
            object.__setattr__(self, name, value)

    @property
    def size(self) -> int:
        return len(self.shift)

    @cached_property
    def matrices(self) -> tuple[Array, ...]:
        """One (D, H, m, m) array a component."""
        ahead, parts = range(self.shift.shape[1]), range(len(self.schedule.components))
        return tuple(np.stack([self.matrix(c, h) for h in ahead], axis=1) for c in parts)

    def matrix(self, component: int, step: int) -> Array:
        """(D, m, m) matrices of `step` periods ahead; the last shock is held beyond them."""
        report = self.schedule.components[component].report
        shift = self.shift[:, min(step, self.shift.shape[1] - 1)]
        out = self.rates.matrix(component, step) * np.exp(shift)[:, report[:, None], report[None, :]]
        return out / out.sum(axis=2, keepdims=True)


def future_rates(
    fitted: Fit | Tally, periods: int, n: int, *, rng: int | np.random.Generator, shocks: Shocks | None = None
) -> ShakenDraws:
    """n draws of the matrices of the next `periods` steps: estimation error and common shocks together.

    fitted : a Fit of any model, or a Tally (then of its plain model)
    shocks : their law, when it was estimated before: `shocks_of` a fit of the same tally and seasons
    Step 0 is the one after the last period of the tally. NotIdentified when the history cannot tell
    (see estimate_shocks); CallError when `periods` or `n` is below 1.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [(t, "fresh", "steady", 80) for t in range(12)] + [(t, "fresh", "left", 20) for t in range(12)]
    >>> rows += [(t, "steady", "steady", 900 - 8 * (t % 3)) for t in range(12)]
    >>> rows += [(t, "steady", "left", 100 + 8 * (t % 3)) for t in range(12)]
    >>> ahead = future_rates(cf.read_counts(rows, states), 3, 400, rng=1)
    >>> ahead.matrix(0, 2).shape, ahead.matrix(0, 2).mean(axis=0)[1].round(2).tolist()
    ((400, 3, 3), [0.0, 0.89, 0.11])
    """
    if periods < 1:
        raise CallError(f"The number of periods ahead is at least 1; got {periods}.")
    model = fit(fitted) if isinstance(fitted, Tally) else fitted
    random = generator(rng)
    shocks = shocks_of(model) if shocks is None else shocks
    base = model.draws(n, rng=random)
    averages, which = averaging(model, shocks, periods)
    lag = model.tally.meta.last - (shocks.first + shocks.times - 1)
    return ShakenDraws(base, deviations(shocks, averages, which, n, random, lag=lag))


def shocks_of(fitted: Fit) -> Shocks:
    """The law of shocks from the whole history of a fit's tally, without the periods it leaves out."""
    tally = fitted.tally
    everything = choose_window(tally, exclude=fitted.excluded)
    position = None if fitted.season is None else fitted.position
    return estimate_shocks(plain_rows(tally, everything), tally.states, cycle_position=position)


def averaging(fitted: Fit, shocks: Shocks, periods: int) -> tuple[Array, NDArray[np.int64]]:
    """What the fitted rate of a row averages over: (K, A, T) weights of past times, and which A each step is.

    A = 1, the weights of the window; with seasons one for each place in the cycle, w of its own periods and
    1 - w of all, w the share that the shrinkage left them.
    """
    times, cube = fitted.rates.by_period(weighted=True)
    n = np.zeros((shocks.times, len(fitted.states)))
    n[times - shocks.first] = cube.sum(axis=2)
    whole = _shares(n)
    if fitted.season is None:
        return whole[:, None, :], np.zeros(periods, dtype=np.int64)
    place = np.array([fitted.position(shocks.first + t) for t in range(shocks.times)])
    own = np.stack([_shares(n * (place == c)[:, None]) for c in range(len(fitted.season))], axis=1)
    w = fitted.season.T[:, :, None] * (own.sum(axis=2, keepdims=True) > 0)
    last = fitted.tally.meta.last
    return w * own + (1 - w) * whole[:, None, :], np.array(
        [fitted.position(last + h) for h in range(periods)]
    )


def _shares(n: Array) -> Array:
    """(K, T) columns of n divided by their sums (0 where the sum is 0)."""
    total = n.sum(axis=0)
    return np.divide(n, total, out=np.zeros_like(n), where=total > 0).T


def deviations(
    shocks: Shocks,
    averages: Array,
    which: NDArray[np.int64],
    n: int,
    random: np.random.Generator,
    *,
    lag: int = 1,
) -> Array:
    """(n, H, K, K) log-weights of future periods relative to the pooled rates.

    averages : (K, A, T) weights over past times that the pooled rate of a row averages over
    which : (H,) which of the A averages the rate of a step ahead is;  lag : steps from the last time to
    step 0
    """
    size, steps = len(shocks.states), len(which)
    out = np.zeros((n, steps, size, size))
    for a, b, c, chosen in _groups(shocks.posterior, n, random):
        f, f_mean = _shared(shocks, a, b, c, averages, steps, lag, random)
        e, e_mean = _own(shocks, a, b, f[:, : shocks.times], averages, steps, lag, random)
        exits = shocks.states.exit_mask
        shared = (f[:, shocks.times :, None] - f_mean[:, :, which].transpose(0, 2, 1))[..., None] * exits
        out[chosen] = shared + e - e_mean[:, :, :, which].transpose(0, 3, 1, 2)
        R = correlation(shocks.times, PERSISTENCES[a])
        kept = 1 - np.einsum("kat,ts,kas->ka", averages, R, averages)[:, which].T
        spread = SIZES[c][:, None] ** 2 * exits + SIZES[b] ** 2
        out[chosen] -= 0.5 * spread[:, None, None, :] * kept[None, :, :, None]
    return out


def _groups(
    posterior: Array, n: int, random: np.random.Generator
) -> Iterator[tuple[int, int, NDArray[np.int64], NDArray[np.int64]]]:
    """(persistence, cell size, exit sizes, indices) of n stratified draws, grouped by the first two."""
    ticks = (np.arange(n) + random.random(n)) / n
    flat = np.minimum(np.searchsorted(posterior.ravel().cumsum(), ticks), posterior.size - 1)
    a, b, c = np.unravel_index(random.permutation(flat), posterior.shape)
    pair = a * posterior.shape[1] + b
    for key in np.unique(pair):
        chosen = np.flatnonzero(pair == key)
        yield int(a[chosen[0]]), int(b[chosen[0]]), c[chosen], chosen


def _shared(
    shocks: Shocks,
    a: int,
    b: int,
    c: NDArray[np.int64],
    averages: Array,
    steps: int,
    lag: int,
    random: np.random.Generator,
) -> tuple[Array, Array]:
    """(D, T + H) paths of f, past and future, and (D, K, A) their averages over the window."""
    root = np.linalg.cholesky(correlation(shocks.times, PERSISTENCES[a]))
    M, m = shocks.information[a][b]
    values, vectors = np.linalg.eigh(root.T @ M @ root)
    values, turned = np.maximum(values, 0.0), vectors.T @ (root.T @ m)
    size = SIZES[c][:, None]
    spread = 1 + size**2 * values
    z = random.standard_normal((len(c), shocks.times))
    past = (size**2 * turned / spread + size * z / np.sqrt(spread)) @ (root @ vectors).T
    future = _onward(past[:, -1], size[:, 0], PERSISTENCES[a], steps, lag, random)
    return np.hstack([past, future]), np.einsum("dt,kat->dka", past, averages)


def _own(
    shocks: Shocks,
    a: int,
    b: int,
    past: Array,
    averages: Array,
    steps: int,
    lag: int,
    random: np.random.Generator,
) -> tuple[Array, Array]:
    """(D, H, K, K) future e, and (D, K, K, A) averages of past e, given the paths of f."""
    size, draws = len(shocks.states), len(past)
    R = correlation(shocks.times, PERSISTENCES[a])
    rows = {w.log.row: w for w in shocks.whitened[a]}
    last, mean = np.zeros((draws, size, size)), np.zeros((draws, size, size, averages.shape[1]))
    for i in np.flatnonzero(~shocks.states.exit_mask):
        pick = np.vstack([np.eye(shocks.times)[-1:], averages[i]])
        found = _row_targets(rows.get(int(i)), pick, R, SIZES[b], past, size, random)
        last[:, i], mean[:, i] = found[:, :, 0], found[:, :, 1:]
    sd = np.full(draws, SIZES[b])[:, None, None]
    return _onward(last, sd, PERSISTENCES[a], steps, lag, random), mean


def _row_targets(
    row: Whitened | None,
    pick: Array,
    R: Array,
    size: float,
    past: Array,
    states: int,
    random: np.random.Generator,
) -> Array:
    """(D, K, 1 + A) draws of the last e and of its averages for every destination of one row."""
    prior = size**2 * pick @ R @ pick.T
    joint = np.kron(np.eye(states), prior)
    centre = np.zeros((len(past), len(joint)))
    if row is not None and size > 0:
        over_time = size**2 * (pick @ R)[:, row.log.time]
        load = np.stack([row.log.loads(j) for j in range(states)])
        cross = (load[:, None, :] * over_time[None]).reshape(len(joint), -1)
        gain = cross @ row.precision(size)
        centre = (row.log.y - past @ row.log.Z.T) @ gain.T
        joint = joint - gain @ cross.T
    values, vectors = np.linalg.eigh((joint + joint.T) / 2)
    z = random.standard_normal(centre.shape)
    drawn = centre + z @ (vectors * np.sqrt(np.maximum(values, 0.0))).T
    return drawn.reshape(len(past), states, len(pick))


def _onward(
    last: Array, size: Array, persistence: float, steps: int, lag: int, random: np.random.Generator
) -> Array:
    """(D, H, ...) stationary autoregression carried on from its last value, `lag` steps to the first."""
    out = np.empty((len(last), steps, *last.shape[1:]))
    gap = persistence**lag if lag else 1.0
    for h in range(steps):
        fresh = random.standard_normal(last.shape) * size * np.sqrt(1 - gap**2)
        last = gap * last + fresh
        out[:, h], gap = last, persistence
    return out
