"""Small models and hand-made tallies that the projector's tests share."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
from hypothesis import strategies as st

from cohortflow.chain import Chain, Component, Schedule
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import ENDS, KINDS, Meta, Tally

STATES = States(
    ["fresh", "steady", "paused", "left", "lapsed"],
    exits=["left", "lapsed"],
    entries=["fresh"],
    away=["paused"],
)
P = np.array(
    [
        [0, 0.8, 0, 0.15, 0.05],
        [0, 0.8, 0.1, 0.1, 0],
        [0, 0.5, 0.4, 0.05, 0.05],
        [0, 0, 0, 1, 0],
        [0, 0, 0, 0, 1.0],
    ]
)
CHAIN = Chain(STATES, P)
MONTHS = Calendar("month")
SEPTEMBER = MONTHS.parse("2026-09")


def seasonal(matrices, states=STATES, first=SEPTEMBER, tail="cycle", calendar=MONTHS):
    """One component with a matrix for each place, on the declared states."""
    size = len(states)
    part = Component(np.asarray(matrices), np.arange(size), np.eye(size), np.eye(size), tail=tail)
    return Schedule(states, (part,), calendar, first=first)


def two_types(share=0.5, sticky=0.02, fragile=0.2):
    """here/gone for two kinds of customers; returns (schedule, states)."""
    states = States(["here", "gone"], exits=["gone"])
    parts = []
    for name, weight, hazard in (("sticky", share, sticky), ("fragile", 1 - share, fragile)):
        law = np.array([[weight, 0], [0, weight]])
        parts.append(Component(np.array([[[1 - hazard, hazard], [0, 1]]]), [0, 1], law, law, name=name))
    return Schedule(states, tuple(parts), MONTHS), states


def banded():
    """`live` in two tenure bands (new, old) and `gone`: three expanded states for two declared ones."""
    states = States(["live", "gone"], exits=["gone"])
    matrix = np.array([[[0, 0.7, 0.3], [0, 0.9, 0.1], [0, 0, 1.0]]])
    start = np.array([[0.25, 0.75, 0], [0, 0, 1.0]])
    join = np.array([[1.0, 0, 0], [0, 0, 1.0]])
    return Schedule(states, (Component(matrix, [0, 0, 1], start, join),), MONTHS), states


def multinomial(matrix, at_risk, df=np.inf):
    """A covariance object: rows of `matrix` as multinomial with at_risk departures each."""
    matrix = np.asarray(matrix, dtype=float)
    size = len(matrix)
    V = np.zeros((size, size, size, size))
    for i in range(size):
        V[i, :, i, :] = (np.diag(matrix[i]) - np.outer(matrix[i], matrix[i])) / at_risk
    return SimpleNamespace(matrix=V.reshape(size * size, size * size), df=df)


def dirichlet_draws(matrix, at_risk, size, seed=1):
    """(size, K, K) draws of rows ~ Dirichlet(at_risk x row); zeros stay zero."""
    rng = np.random.default_rng(seed)
    matrix = np.asarray(matrix, dtype=float)
    out = np.zeros((size, *matrix.shape))
    for i, row in enumerate(matrix):
        used = row > 0
        out[:, i, used] = rng.dirichlet(at_risk * row[used], size)
    return out


def tally_of_stays(stays, *, states=STATES, first=1, last=6, memos=(), calendar=None):
    """Tally from stays written out by hand: (kind, from_state, [(period, state), ...]) each.

    Consecutive rows that are not neighbours are a gap; a stay that stops early without an exit is unseen.
    """
    moves, starts, ages = [], [], []
    index = {name: i for i, name in enumerate(states.names)}
    for number, (kind, came_from, rows) in enumerate(stays):
        code = KINDS.index(kind)
        starts.append((number, 0, rows[0][0], index[rows[0][1]], code, index.get(came_from, -1), 1, 1))
        for (period, name), following in zip(rows, [*rows[1:], None], strict=True):
            gone = name in states.exits
            end = "exit" if gone else "moved" if following else "as_of" if period == last else "unseen"
            gap, onward = (following[0] - period, index[following[1]]) if following else (0, -1)
            moves.append((number, 0, period, gap, ENDS.index(end), index[name], onward, 1, 1))
            ages.append((0, rows[0][0], code, period - rows[0][0], index[name], 1))
    tables = {
        "moves": pd.DataFrame(
            moves, columns=["bucket", "segment", "period", "gap", "end", "state", "next_state", "n", "weight"]
        ),
        "starts": pd.DataFrame(
            starts, columns=["bucket", "segment", "period", "state", "kind", "from_state", "n", "weight"]
        ),
        "ages": pd.DataFrame(ages, columns=["segment", "joined", "kind", "age", "state", "n"]),
        "memos": pd.DataFrame(
            [(0, p, k, index[s], n) for p, k, s, n in memos],
            columns=["segment", "period", "kind", "state", "n"],
        ),
    }
    meta = Meta(states, calendar or Calendar("step"), first, last, len(stays), "hand", bucket_bits=8)
    return Tally.build(meta, tables)


@st.composite
def chains(draw, size=4, exits=1):
    """Random chains with exits; every entry positive, so that everybody can leave."""
    weights = draw(
        st.lists(st.lists(st.floats(0.05, 1.0), min_size=size, max_size=size), min_size=size, max_size=size)
    )
    matrix = np.array(weights)
    matrix[size - exits :] = np.eye(size)[size - exits :]
    names = [f"s{i}" for i in range(size)]
    return Chain(States(names, exits=names[size - exits :]), matrix / matrix.sum(axis=1, keepdims=True))
