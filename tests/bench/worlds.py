"""Simulated customers for tests and benches: panels of states, and their tally made straight from the panel.

This is a second way to count, written apart from the program's own sweep: whole-array arithmetic on a (C, T)
panel, -1 where a customer has no row. An exit stands once, in the period of leaving.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import Meta, Tally


def simulate(P, start, periods, rng, *, entry=None):
    """(C, T) panel. P : (K, K), (T-1, K, K) or (C, K, K) with a leading axis named by its length;
    start : (C,) states; entry : (C,) period of the first row. Rows after an absorbing state are -1."""
    customers = len(start)
    P = np.asarray(P, dtype=float)
    entry = np.zeros(customers, dtype=int) if entry is None else entry
    panel = np.full((customers, periods), -1)
    absorbing = np.isclose(np.diagonal(P.reshape(-1, *P.shape[-2:]).mean(axis=0)), 1.0)
    cumulative = P.cumsum(axis=-1)
    for t in range(periods):
        panel[entry == t, t] = start[entry == t]
        if t == 0:
            continue
        here = np.flatnonzero((panel[:, t - 1] >= 0) & ~absorbing[np.maximum(panel[:, t - 1], 0)])
        state = panel[here, t - 1]
        if P.ndim == 2:
            law = cumulative[state]
        elif len(P) == customers and customers != periods - 1:
            law = cumulative[here, state]
        else:
            law = cumulative[t - 1, state]
        panel[here, t] = (rng.random(len(here))[:, None] > law[:, :-1]).sum(axis=1)
    return panel


def panel_tally(
    panel, states: States, *, buckets=None, segment=None, first=0, calendar="step", full=True
) -> Tally:
    """Tally of a (C, T) panel. buckets : number of buckets (default: one a customer);
    segment : (C,) codes with values "a", "b", ...; full : also starts, contexts, ages and paths."""
    panel = np.asarray(panel)
    customers, periods = panel.shape
    bucket = np.arange(customers) if buckets is None else np.arange(customers) % buckets
    codes = np.zeros(customers, dtype=int) if segment is None else np.asarray(segment)
    tables = {"moves": _moves(panel, states, bucket, codes, first)}
    if full:
        tables |= {
            "starts": _starts(panel, bucket, codes, first),
            "contexts": _contexts(panel, bucket, codes, first),
        }
        tables["paths"] = pd.DataFrame({"segment": codes, "level": 62, "path": _paths(panel, first), "n": 1})
        tables["ages"] = _ages(panel, codes, first)
    columns, values = ((("group", "segment"),), tuple((chr(97 + i),) for i in range(codes.max() + 1)))
    if segment is None:
        columns, values = (), ((),)
    period = calendar if isinstance(calendar, Calendar) else Calendar(calendar)
    meta = Meta(
        states,
        period,
        first,
        first + periods - 1,
        customers,
        "simulated",
        segment_columns=columns,
        segments=values,
        tables=tuple(tables),
    )
    return Tally.build(meta, tables)


def _moves(panel, states, bucket, codes, first):
    c, t = np.nonzero(panel >= 0)
    state = panel[c, t]
    padded = np.pad(panel, ((0, 0), (0, 1)), constant_values=-1)
    following = padded[c, t + 1]
    last = t == panel.shape[1] - 1
    end = np.where(following >= 0, 0, np.where(states.exit_mask[state], 2, np.where(last, 1, 3)))
    one = np.ones(len(c), dtype=int)
    return pd.DataFrame({
        "bucket": bucket[c], "segment": codes[c], "period": t + first, "gap": (following >= 0).astype(int),
        "end": end, "state": state, "next_state": following, "n": one, "weight": one,
    })  # fmt: skip


def _entries(panel):
    seen = panel >= 0
    return np.where(seen.any(axis=1), seen.argmax(axis=1), -1)


def _starts(panel, bucket, codes, first):
    entry = _entries(panel)
    c = np.flatnonzero(entry >= 0)
    return pd.DataFrame({
        "bucket": bucket[c], "segment": codes[c], "period": entry[c] + first, "state": panel[c, entry[c]],
        "kind": np.where(entry[c] == 0, 2, 0), "from_state": -1, "n": 1, "weight": 1,
    })  # fmt: skip


def _contexts(panel, bucket, codes, first):
    customers, periods = panel.shape
    entry = _entries(panel)
    spell = np.zeros((customers, periods), dtype=int)
    for t in range(1, periods):
        spell[:, t] = np.where(panel[:, t] == panel[:, t - 1], spell[:, t - 1] + 1, 0)
    known = (
        np.arange(periods)[None, :] - spell
    ) > 0  # a spell that began at the left edge has unknown length
    padded = np.pad(panel, ((0, 0), (0, 1)), constant_values=-1)
    c, t = np.nonzero((panel >= 0) & (padded[:, 1:] >= 0))
    return pd.DataFrame({
        "bucket": bucket[c], "segment": codes[c], "period": t + first,
        "tenure": np.where(entry[c] > 0, t - entry[c], -1), "spell": np.where(known[c, t], spell[c, t], -1),
        "previous": np.where(t > 0, panel[c, np.maximum(t - 1, 0)], -1), "state": panel[c, t],
        "next_state": padded[c, t + 1], "n": 1,
    })  # fmt: skip


def _ages(panel, codes, first):
    entry = _entries(panel)
    c, t = np.nonzero(panel >= 0)
    kind = np.where(entry[c] == 0, 2, 0)
    return pd.DataFrame(
        {
            "segment": codes[c],
            "joined": entry[c] + first,
            "kind": kind,
            "age": t - entry[c],
            "state": panel[c, t],
            "n": 1,
        }
    )


def _paths(panel, first):
    out = []
    for row in panel:
        t = np.flatnonzero(row >= 0)
        runs, text = np.split(row[t[0] : t[-1] + 1], np.flatnonzero(np.diff(row[t[0] : t[-1] + 1])) + 1), []
        for run in runs:
            text.append(f"{'-' if run[0] < 0 else run[0]}*{len(run)}")
        out.append(" ".join([str(t[0] + first), *text]))
    return out


# The test chain of the coverage studies: all start in N, C absorbs.
STATES = States(["N", "R", "L", "D", "C"], exits=["C"], entries=["N"])
CHAIN = np.array([[0, .50, .05, .30, .15], [0, .72, .10, .14, .04], [0, .10, .85, .04, .01],
                  [0, .15, .01, .64, .20], [0, 0, 0, 0, 1]])  # fmt: skip


def autoregression(rng, periods, sd, persistence, shape=()):
    """(periods, ...) stationary first-order autoregression."""
    out = np.empty((periods, *shape))
    out[0] = rng.standard_normal(shape) * sd
    for t in range(1, periods):
        out[t] = persistence * out[t - 1] + np.sqrt(1 - persistence**2) * sd * rng.standard_normal(shape)
    return out


def shocked_rates(P, exits, shared, own):
    """(T, K, K) rows P exp(f_t on exits + e_t), made probability rows."""
    rates = P * np.exp(shared[:, None, None] * exits + own)
    return rates / rates.sum(axis=2, keepdims=True)


def settled(P, exits, customers):
    """Mix of a base of this size that joiners in state 0 keep level, and their number a period."""
    Q = P[np.ix_(~exits, ~exits)]
    visits = np.linalg.inv(np.eye(len(Q)) - Q)[0]
    joining = customers / visits.sum()
    mix = np.zeros(len(P))
    mix[~exits] = joining * visits
    return mix, joining


def walk_counts(rates, mix, joining, rng):
    """(T, K, K) counts of moves of a base with Poisson joiners in state 0, and the (K,) mix at the end."""
    now, cube = np.rint(mix).astype(int), np.zeros(rates.shape, dtype=int)
    for t, P in enumerate(rates):
        cube[t] = rng.multinomial(now, P)
        cube[t, now == 0] = 0
        now = cube[t].sum(axis=0)
        now[-1] = 0
        now[0] += rng.poisson(joining)
    return cube, now


def shocked_cube(P, states, customers, periods, rng, *, exit_sd=0.0, cell_sd=0.0, persistence=0.0, path=None):
    """(T, K, K) counts under shocks; `path` (T,) gives the shared shock itself."""
    shared = autoregression(rng, periods, exit_sd, persistence) if path is None else np.asarray(path)
    own = autoregression(rng, periods, cell_sd, persistence, P.shape)
    rates = shocked_rates(P, states.exit_mask, shared, own)
    return walk_counts(rates, *settled(P, states.exit_mask, customers), rng)[0]


def cube_tally(cube, states, *, now=None, first=0, calendar="step"):
    """Tally of counts by period (one bucket), with the base of the last period and the joiners in state 0."""
    periods = len(cube)
    t, i, j = np.nonzero(cube)
    now = np.r_[cube[-1].sum(axis=0)[:-1], 0] if now is None else now
    at_end = pd.DataFrame(
        {
            "period": periods,
            "gap": 0,
            "end": 1,
            "state": np.flatnonzero(now),
            "next_state": -1,
            "n": now[now > 0],
        }
    )
    moves = pd.DataFrame({"period": t, "gap": 1, "end": 0, "state": i, "next_state": j, "n": cube[t, i, j]})
    moves = pd.concat([moves, at_end]).assign(bucket=0, segment=0)
    moves = moves.assign(weight=moves["n"], period=moves["period"] + first)
    joined = np.append(cube[1:, 0].sum(axis=1) - cube[:-1, :, 0].sum(axis=1), now[0] - cube[-1, :, 0].sum())
    starts = pd.DataFrame(
        {
            "bucket": 0,
            "segment": 0,
            "period": np.arange(1, periods + 1) + first,
            "state": 0,
            "kind": 0,
            "from_state": -1,
            "n": joined,
            "weight": joined,
        }
    )
    meta = Meta(
        states,
        Calendar(calendar),
        first,
        first + periods,
        int(cube[0].sum()),
        "simulated",
        tables=("moves", "starts"),
    )
    return Tally.build(meta, {"moves": moves, "starts": starts})
