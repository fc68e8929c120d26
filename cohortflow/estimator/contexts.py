"""Models whose rates depend on more than the state: a context (tenure, time in the state, previous state).

A ContextModel names the context of a row of counts, of a joiner, and of a customer after a move. From that
follow the rows of rates (context, state), shrunk to the state's pooled row, the expanded states that can be
reached, the matrix between them, and where the customers of today stand: the counts tell who is in which
context.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.estimator.layout import Built, Part, build, lay_out
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import customer_noise, shrink_rows
from cohortflow.estimator.window import Window, refuse_impossible
from cohortflow.states import States
from cohortflow.tally import KINDS, Tally

Array = NDArray[np.float64]
Ints = NDArray[np.int64]

UNKNOWN = -1


@dataclass(frozen=True, eq=False)
class ContextModel:
    """contexts : C, their number;  code : table with tenure, spell, previous, state -> (rows,) context
    follow : (C, K, K) context after a move i -> j;  joined : (K,) context of a joiner in a state
    rows : (C, K) which row of rates a (context, state) uses, 0 .. R-1 (several may share one)
    """

    contexts: int
    code: Callable[[pd.DataFrame], Ints]
    follow: Ints
    joined: Ints
    rows: Ints


def moves_with_context(tally: Tally, window: Window) -> pd.DataFrame:
    """The rows of `contexts` in the window; InputError for impossible moves."""
    table = tally.table("contexts")
    table = table[window.keeps(table["period"])]
    refuse_impossible(tally, table)
    return table


def present(tally: Tally) -> pd.DataFrame:
    """Customers at the end of the last period: tenure, spell, previous, state, n; -1 where unknown."""
    last, table, starts = tally.meta.last, tally.table("contexts"), tally.table("starts")
    came = table[table["period"] == last - 1]
    stayed = came["state"] == came["next_state"]
    arrived = pd.DataFrame(
        {
            "tenure": np.where(came["tenure"] >= 0, came["tenure"] + 1, UNKNOWN),
            "spell": np.where(stayed, np.where(came["spell"] >= 0, came["spell"] + 1, UNKNOWN), 0),
            "previous": came["state"],
            "state": came["next_state"],
            "n": came["n"],
        }
    )
    began = starts[starts["period"] == last]
    known = began["kind"] != KINDS.index("unknown")
    zero = np.where(known, 0, UNKNOWN)
    fresh = pd.DataFrame(
        {"tenure": zero, "spell": zero, "previous": UNKNOWN, "state": began["state"], "n": began["n"]}
    )
    everyone = pd.concat([arrived, fresh], ignore_index=True)
    counted = np.bincount(everyone["state"], everyone["n"], minlength=len(tally.states))
    rest = np.maximum(tally.mix().to_numpy() - counted, 0)
    back = pd.DataFrame({"state": np.arange(len(rest)), "n": rest}).assign(tenure=-1, spell=-1, previous=-1)
    found = pd.concat([everyone, back[back["n"] > 0]], ignore_index=True)
    return found[~tally.states.exit_mask[found["state"].to_numpy(int)]].reset_index(drop=True)


def build_contexts(
    tally: Tally,
    window: Window,
    rates: RowCounts,
    model: ContextModel,
    *,
    notes: tuple[str, ...] = (),
    settings: dict[str, Any] | None = None,
) -> Built:
    """Rows, expanded states, start and join laws of a ContextModel."""
    states = tally.states
    table = moves_with_context(tally, window)
    code = model.code(table)
    state = table["state"].to_numpy()
    rows = model.rows[code, state]
    owner = _owners(model, len(states))
    possible = states.allowed & ((rates.N > 0) | (rates.at_risk == 0)[:, None])
    counts = RowCounts.of_table(
        table.assign(row=rows, column=table["next_state"]),
        possible[owner],
        window.weight(table["period"].to_numpy()),
    )
    shrink = shrink_rows(counts, owner, customer_noise(rates), bar_missed=True)
    now = present(tally)
    start = _law(now, model.code(now), table.assign(context=code), model, states)
    reached, index = _reachable(model, states, start, possible)
    layout = _layout(model, states, reached, index)

    def matrices(drawn: Array) -> Array:
        return lay_out(drawn, *layout)[..., None, :, :] + _stay(reached, states)

    join = np.zeros((len(states), model.contexts, len(states)))
    join[np.arange(len(states)), model.joined, np.arange(len(states))] = 1.0
    part = Part(
        matrices, reached[:, 1], start.reshape(len(states), -1)[:, _flat(reached, states)],
        join.reshape(len(states), -1)[:, _flat(reached, states)],
    )  # fmt: skip
    thin = _thin(counts, model, reached, states)
    extra = {"expanded_states": len(reached), **(settings or {})}
    return build(tally, counts, (part,), shrink=shrink, rates=rates, notes=(*notes, *thin), settings=extra)


def _owners(model: ContextModel, size: int) -> Ints:
    """(R,) declared state of each row of rates."""
    owner = np.zeros(int(model.rows.max()) + 1, dtype=np.int64)
    for i in range(size):
        owner[model.rows[:, i]] = i
    return owner


def _law(now: pd.DataFrame, code: Ints, past: pd.DataFrame, model: ContextModel, states: States) -> Array:
    """(K, C, K) law over contexts of those now in a state; where nobody is, the past's, else a joiner's."""
    size = len(states)
    out = np.zeros((size, model.contexts, size))
    for k in range(size):
        here, then = now["state"].to_numpy() == k, past["state"].to_numpy() == k
        counts = np.bincount(code[here], now["n"].to_numpy()[here], minlength=model.contexts)
        if not counts.sum():
            counts = np.bincount(past["context"][then], past["n"][then], minlength=model.contexts)
        if not counts.sum():
            counts = np.eye(model.contexts)[model.joined[k]]
        out[k, :, k] = counts / counts.sum()
    return out


def _reachable(model: ContextModel, states: States, start: Array, possible: Array) -> tuple[Ints, Ints]:
    """(m, 2) pairs (context, state) that start, joiners and allowed moves lead to, and their (C, K) index."""
    seen = start.sum(axis=0) > 0
    seen[model.joined, np.arange(len(states))] = True
    waiting = [tuple(pair) for pair in np.argwhere(seen)]
    while waiting:
        context, i = waiting.pop()
        if states.exit_mask[i]:
            continue
        for j in np.flatnonzero(possible[i]):
            after = (int(model.follow[context, i, j]), int(j))
            if not seen[after]:
                seen[after] = True
                waiting.append(after)
    seen[:, states.exit_mask] = False
    seen[0, states.exit_mask] = True
    pairs = np.argwhere(seen)
    pairs = pairs[np.lexsort((pairs[:, 0], pairs[:, 1]))]
    index = np.full(seen.shape, UNKNOWN)
    index[pairs[:, 0], pairs[:, 1]] = np.arange(len(pairs))
    index[:, states.exit_mask] = index[0, states.exit_mask]
    return pairs, index


def _layout(model: ContextModel, states: States, pairs: Ints, index: Ints) -> tuple[Ints, Ints]:
    """Row of rates of each expanded state, and the expanded state after each move (-1: none)."""
    context, state = pairs[:, 0], pairs[:, 1]
    row = model.rows[context, state]
    target = np.arange(len(states))
    successor = index[model.follow[context, state], target[None, :]]
    successor[states.exit_mask[state]] = UNKNOWN
    return row, successor


def _stay(pairs: Ints, states: States) -> Array:
    return np.diag(states.exit_mask[pairs[:, 1]].astype(float))


def _flat(pairs: Ints, states: States) -> Ints:
    return pairs[:, 0] * len(states) + pairs[:, 1]


def _thin(counts: RowCounts, model: ContextModel, pairs: Ints, states: States) -> tuple[str, ...]:
    """States that have rows in use without a single departure: those rows are the pooled ones."""
    live = ~states.exit_mask[pairs[:, 1]]
    rows = model.rows[pairs[live, 0], pairs[live, 1]]
    empty = {states.names[i] for i, r in zip(pairs[live, 1], rows, strict=True) if counts.at_risk[r] == 0}
    return tuple(f"empty_rows:{n}" for n in states.names if n in empty)
