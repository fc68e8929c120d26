"""Customers who differ for good: latent types, or movers and stayers. Each type is a component.

Sorting is what a pooled chain misses: those who leave early are not a fair sample, so late churn is lower
than
the average rate says. Types repair the far tail; order, tenure and periods repair the fitted window only.

mixture       G chains by EM (em.py) from many starts. The number of types is the one whose held-out customers
              score best, an additional type being taken only if it gains more than twice its standard error
              (information criteria with log n ask for one type here when two are there).
mover_stayer  one chain, and customers who never move; the share of stayers depends on the first state.
Without
              the prior it is the maximum-likelihood fit of the classical model, for any lengths of history.

Extrapolation beyond the window is the model's word, not the data's: show the plain curve beside it.
Sources: Goodman (1961) JASA 56, 841; Frydman (1984) JASA 79, 632; Fuchs & Greenhouse (1988) Biometrics 44,
605.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from cohortflow.chain import Component, Schedule
from cohortflow.errors import CallError
from cohortflow.estimator.em import Types, log_joint, membership, ordered, random_start, run, stayer_start
from cohortflow.estimator.layout import Built, unknown_states, with_exits
from cohortflow.estimator.mixture_error import TypeSampler
from cohortflow.estimator.patterns import Patterns, patterns_of
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.window import Window
from cohortflow.tally import Tally

Array = NDArray[np.float64]

PRIOR = 0.25
GAIN_ERRORS = 2.0
MOST_TYPES = 3
STARTS = 10
LONG_HISTORIES = 0.1  # share of customers with 2G - 1 moves below which G types are not identified
FINISHED = 2  # best starts that are run to the end on them; the best of these goes on to all customers
SCREENED = 10_000  # customers on whom starts and numbers of types are tried
SCREEN_ROUNDS = 12
SEED = 20_260_930


def mixture(
    tally: Tally, window: Window, rates: RowCounts, *, types: int | None = None, starts: int = STARTS
) -> Built:
    """types : number of latent types; None chooses 1 .. 3 by held-out score;  starts : random starts of EM.

    CallError for types or starts below 1; NotIdentified without paths of customers.
    """
    for name, value in (("types", types), ("starts", starts)):
        if value is not None and (isinstance(value, bool) or value < 1):
            raise CallError(f"{name} is a whole number from 1 on; got {value!r}.")
    patterns = patterns_of(tally, window)
    rng = np.random.default_rng(SEED)
    settings: dict[str, Any] = {"starts": starts, "customers": int(patterns.n.sum())}
    count = types
    if count is None:
        gains = held_out_gains(patterns, starts, rng)
        count = 1 + int(np.argmin(np.append(np.array([g - GAIN_ERRORS * s for g, s in gains]) > 0, False)))
        settings["held_out_gain"] = {f"{k + 2} types": list(g) for k, g in enumerate(gains)}
    found = best_types(patterns, count, starts, rng)
    return _built(tally, rates, patterns, found, PRIOR, settings)


def mover_stayer(tally: Tally, window: Window, rates: RowCounts) -> Built:
    """Movers and stayers; NotIdentified without paths of customers."""
    patterns = patterns_of(tally, window)
    found = run(patterns, stayer_start(patterns), prior=0.0, rounds=2000, tolerance=1e-10)
    return _built(tally, rates, patterns, found, 0.0, {"customers": int(patterns.n.sum())})


def best_types(patterns: Patterns, count: int, starts: int, rng: np.random.Generator) -> Types:
    """The best of several starts, tried on a sample of customers and finished on all."""
    if count == 1:
        return run(patterns, random_start(patterns, 1, rng), prior=PRIOR, rounds=2)
    screen = patterns.sample(SCREENED, rng)
    tried = [
        run(screen, random_start(screen, count, rng), prior=PRIOR, rounds=SCREEN_ROUNDS)
        for _ in range(starts)
    ]
    tried.sort(key=lambda t: -t.score)
    finished = [run(screen, start, prior=PRIOR) for start in tried[:FINISHED]]
    return run(patterns, max(finished, key=lambda t: t.score), prior=PRIOR)


def held_out_gains(
    patterns: Patterns, starts: int, rng: np.random.Generator, *, most: int = MOST_TYPES
) -> list[tuple[float, float]]:
    """For 2, 3 .. types: gain in log score a held-out customer over one type less, and its standard error."""
    halves = patterns.sample(2 * SCREENED, rng).halves(rng)
    scores = []
    for count in range(1, most + 1):
        parts = []
        for train, test in (halves, halves[::-1]):
            fitted = best_types(train, count, max(2, starts // 2), rng)
            parts.append(_scores(test, fitted))
        scores.append(np.concatenate(parts))
    n = np.concatenate([halves[1].n, halves[0].n])
    out = []
    for less, more in zip(scores, scores[1:], strict=False):
        gain = more - less
        mean = float(n @ gain / n.sum())
        out.append((mean, float(np.sqrt(n @ (gain - mean) ** 2) / n.sum())))
    return out


def _scores(patterns: Patterns, types: Types) -> Array:
    """(U,) log-likelihood of each pattern; groups without a membership of their own take the average one."""
    return logsumexp(log_joint(patterns, types), axis=1)


def _built(
    tally: Tally,
    rates: RowCounts,
    patterns: Patterns,
    found: Types,
    prior: float,
    settings: dict[str, Any],
) -> Built:
    states, size = tally.states, len(tally.states)
    found = ordered(found, patterns.table().sum(axis=1))
    z, _ = membership(patterns, found)
    known = rates.at_risk > 0
    matrices = [
        with_exits(np.where(known[:, None], _filled(P, rates.P), np.nan), states.exit_mask) for P in found.P
    ]
    start, join = laws(patterns, found, z)
    names = type_names(found)
    components = tuple(
        Component(P[None], np.arange(size), np.diag(start[:, g]), np.diag(join[:, g]), name=names[g])
        for g, P in enumerate(matrices)
    )
    schedule = Schedule(
        states, components, tally.calendar, first=tally.meta.last, unknown=unknown_states(rates, states)
    )
    settings = {
        **settings,
        "types": found.count,
        "converged": found.converged,
        "rounds": found.rounds,
        "log_likelihood": found.loglik,
        "shares": {n: float(s) for n, s in zip(names, patterns.n @ z / patterns.n.sum(), strict=True)},
    }
    return Built(schedule, TypeSampler(patterns, found, prior), _notes(found, z, patterns), settings)


def laws(patterns: Patterns, types: Types, z: Array) -> tuple[Array, Array]:
    """(K, G) share of each type among those now in a state, and among joiners in it.

    Now: posterior memberships of those who are there. Joiners: the membership of the group that joined; where
    nobody joined, that of the group found at the start of the log, else everybody's.
    """
    size, overall = patterns.size, patterns.n @ z / patterns.n.sum()
    here = patterns.now >= 0
    now = np.zeros((size, types.count))
    np.add.at(now, patterns.now[here], z[here] * patterns.n[here, None])
    people = np.bincount(patterns.group, patterns.n, minlength=2 * size)
    join = np.where(
        (people[:size] > 0)[:, None],
        types.share[:size],
        np.where((people[size:] > 0)[:, None], types.share[size:], overall),
    )
    total = now.sum(axis=1, keepdims=True)
    return np.where(total > 0, now / np.maximum(total, 1e-300), join), join


def type_names(types: Types) -> list[str]:
    """ "movers" and "stayers", or "type 1" (most persistent) on."""
    if types.fixed >= 0:
        return ["stayers" if g == types.fixed else "movers" for g in range(types.count)]
    return ["all"] if types.count == 1 else [f"type {g + 1}" for g in range(types.count)]


def _filled(P: Array, pooled: Array) -> Array:
    """Rows that no sampled customer left take the pooled row (the sample of paths may miss a rare state)."""
    return np.where((P.sum(axis=1) > 0)[:, None], P, np.nan_to_num(pooled))


def _notes(types: Types, z: Array, patterns: Patterns) -> tuple[str, ...]:
    shares = patterns.n @ z / patterns.n.sum()
    names = type_names(types)
    notes = [] if types.converged or types.count == 1 else ["not_converged"]
    notes += [f"tiny_type:{name}" for name, s in zip(names, shares, strict=True) if s < 0.02]
    long = patterns.moves.sum(axis=1) >= 2 * types.count - 1
    if patterns.n[long].sum() < LONG_HISTORIES * patterns.n.sum():
        notes.append("types_not_identified")
    return tuple(notes)
