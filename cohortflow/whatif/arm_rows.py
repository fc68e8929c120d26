r"""The rates of the arms of an experiment, side by side, with one covariance over all of them.

Each arm has rows of its own for the states in which it was treated; all other rows are everybody's. Customers
keep together in the covariance, whichever rows they pass through. Differences of single rates:

    d = p_a - p_c,   limits d - sqrt((p_a - l_a)^2 + (u_c - p_c)^2),  d + sqrt((u_a - p_a)^2 + (p_c - l_c)^2)

(l, u) Wilson limits at the effective numbers n / design effect. The p-value is that of the limit which just
touches 0, so that it agrees with the interval; over all moves compared it is adjusted by Holm's rule.
Sources: Newcombe (1998) Stat. Med. 17, 873 (method 10); Holm (1979) Scand. J. Statist. 6, 65.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from cohortflow.errors import CallError, NotIdentified, listed, nearest
from cohortflow.estimator.covariance import Covariance, covariance, design_effects
from cohortflow.estimator.rows import RowCounts
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[np.float64]

BISECTIONS = 80
FARTHEST = 40.0


@dataclass(frozen=True, eq=False)
class ArmRows:
    """Rows of rates: those of each arm one after the other, then everybody's.

    where : (A, K) row of rates that an arm's customers follow in a declared state; -1 at exits
    counts, cov : over all rows;  notes : codes, "pooled_row:taster" where an arm has no departures of its own
    """

    states: States
    arms: tuple[str, ...]
    treated: tuple[str, ...]
    where: NDArray[np.int64]
    counts: RowCounts
    cov: Covariance
    notes: tuple[str, ...]

    def matrices(self, rates: Array, arm: str) -> Array:
        """(..., K, K) of one arm from (..., R, K) rates."""
        rows = self.where[self.arms.index(arm)]
        return np.where((rows < 0)[:, None], np.eye(len(rows)), rates[..., rows, :])

    def spread(self, gradient: Array, arm: str) -> Array:
        """(R, K): a gradient with respect to one arm's matrix, at the rows that it is made of."""
        out = np.zeros(self.counts.shape)
        rows = self.where[self.arms.index(arm)]
        np.add.at(out, rows[rows >= 0], gradient[rows >= 0])
        return out


def arm_rows(
    tally: Tally, column: str, arms: Sequence[str], *, starts: int | None, treated: Sequence[str], kind: str
) -> ArmRows:
    """Count the moves of each arm in its treated states, and everybody's elsewhere, from the period `starts`
    on.
    """
    states, size = tally.states, len(tally.states)
    moves = tally.one_step if starts is None else tally.one_step[tally.one_step["period"] >= starts - 1]
    if not len(moves):
        raise NotIdentified("No move was counted since the experiment began; wait, or check `starts`.")
    own = _arm_of(tally, column, arms)[moves["segment"].to_numpy()]
    state = moves["state"].to_numpy()
    chosen, pooled = _comparable(own, state, moves["n"].to_numpy(), arms, states, treated)
    everyone = len(arms) * size
    row = np.where((own >= 0) & chosen[state], own * size + state, everyone + state)
    case = None
    if tally.meta.weighted:
        case = (moves["weight"] / tally.meta.weight_scale / moves["n"]).to_numpy()
    table = moves.rename(columns={"next_state": "column"}).assign(row=row)
    allowed = np.tile(states.allowed, (len(arms) + 1, 1))
    counts = RowCounts.of_table(table, allowed, np.ones(len(moves)), case)
    where = np.arange(everyone).reshape(len(arms), size)
    where = np.where(chosen, where, everyone + np.arange(size))
    where[:, states.exit_mask] = -1
    names = tuple(f"{a}/{s}" for a in (*arms, "everybody") for s in states.names)
    cov = covariance(counts, kind, row_names=names, column_names=states.names)
    kept = tuple(n for n, on in zip(states.names, chosen, strict=True) if on)
    return ArmRows(states, tuple(arms), kept, where, counts, cov, tuple(f"pooled_row:{s}" for s in pooled))


def _arm_of(tally: Tally, column: str, arms: Sequence[str]) -> NDArray[np.int64]:
    """(segments,) position of each segment code's arm; -1 when it is in none of them."""
    names = [name for name, _ in tally.meta.segment_columns]
    at = names.index(column)
    return np.array([arms.index(v[at]) if v[at] in arms else -1 for v in tally.meta.segments], dtype=np.int64)


def _comparable(
    own: NDArray[np.int64], state: NDArray[np.int64], n: Array, arms: Sequence[str], states: States,
    treated: Sequence[str],
) -> tuple[NDArray[np.bool_], list[str]]:  # fmt: skip
    """(K,) states in which every arm has rows of its own, and the treated ones in which one has none."""
    risk = np.zeros((len(arms), len(states)))
    inside = own >= 0
    np.add.at(risk, (own[inside], state[inside]), n[inside])
    wanted = states.mask(treated) & ~states.exit_mask
    chosen = wanted & (risk > 0).all(axis=0)
    if not chosen.any():
        raise NotIdentified(
            f"The arms {listed(arms)} have no state in common from which departures were counted: nothing "
            "can be compared. Check the arm column and `starts`."
        )
    return chosen, [n for n, w, c in zip(states.names, wanted, chosen, strict=True) if w and not c]


def choose_arms(
    tally: Tally, column: str | None, control: str | None, arms: Sequence[str] | None
) -> tuple[str, list[str]]:
    """The arm column and the arms, control first. Customers without an arm ("") are in none."""
    roles = tally.meta.segment_columns
    marked = [name for name, role in roles if role == "arm"]
    if column is None and len(marked) != 1:
        raise CallError(
            f"Which column tells the arms? Segment columns here: {listed(n for n, _ in roles)}; declare one "
            "as the arm of the extract, or pass column=."
        )
    name = column if column is not None else marked[0]
    values = [v for v in tally.segment_values(name) if v != ""]
    if control is None or control not in values:
        hint = "" if control is None else nearest(control, values)
        raise CallError(f'control is "{control}"{hint}; it is one of the arms {listed(values)}.')
    chosen = [v for v in values if v != control] if arms is None else list(arms)
    for arm in chosen:
        if arm not in values or arm == control:
            raise CallError(f'"{arm}" is not an arm besides the control; the arms are {listed(values)}.')
    if not chosen:
        raise CallError(
            f'There is no arm to compare with "{control}": the column "{name}" has no other value.'
        )
    return name, [control, *chosen]


def move_differences(rows: ArmRows, arm: str, *, quantile: float) -> pd.DataFrame:
    """from, to, control, treated, difference, low, high, p_value, n_control, n_arm of every allowed move."""
    effects = design_effects(rows.counts, rows.cov)
    first, second = (rows.where[rows.arms.index(a)] for a in (rows.arms[0], arm))
    origin, to = np.nonzero(rows.states.allowed & rows.states.mask(rows.treated)[:, None])
    sides = []
    for place in (first, second):
        row = place[origin]
        n = rows.counts.at_risk[row]
        effective = rows.counts.effective[row] / effects[row, to]
        sides.append((rows.counts.P[row, to], effective, n))
    (p_c, m_c, n_c), (p_a, m_a, n_a) = sides
    low, high = newcombe(p_a, m_a, p_c, m_c, quantile)
    chance = touching(p_a, m_a, p_c, m_c, rows.cov.df)
    names = np.array(rows.states.names, dtype=object)
    never = (p_a == 0) & (p_c == 0)
    figures = {"control": p_c, "treated": p_a, "difference": p_a - p_c, "low": low, "high": high,
               "p_value": np.where(never, np.nan, chance), "n_control": n_c, "n_arm": n_a}  # fmt: skip
    return pd.DataFrame({"from": names[origin], "to": names[to], **figures})


def newcombe(p_a: Array, n_a: Array, p_c: Array, n_c: Array, z: Array | float) -> tuple[Array, Array]:
    """Limits of p_a - p_c from the Wilson limits of each.

    >>> one, two = (np.array([56 / 70]), np.array([70.0])), (np.array([48 / 80]), np.array([80.0]))
    >>> low, high = newcombe(*one, *two, 1.959964)
    >>> low.round(4), high.round(4)  # Newcombe (1998), Table II, example (a): .0524, .3339
    (array([0.0524]), array([0.3339]))
    """
    l_a, u_a = _wilson(p_a, n_a, z)
    l_c, u_c = _wilson(p_c, n_c, z)
    d = p_a - p_c
    return d - np.hypot(p_a - l_a, u_c - p_c), d + np.hypot(u_a - p_a, p_c - l_c)


def touching(p_a: Array, n_a: Array, p_c: Array, n_c: Array, df: float) -> Array:
    """Two-sided p-value: that of the interval whose limit just touches 0."""
    near, far = np.zeros(len(p_a)), np.full(len(p_a), FARTHEST)
    for _ in range(BISECTIONS):
        z = (near + far) / 2
        low, high = newcombe(p_a, n_a, p_c, n_c, z)
        inside = (low < 0) & (high > 0)
        near, far = np.where(inside, near, z), np.where(inside, z, far)
    tail = special.ndtr(-far) if np.isinf(df) else special.stdtr(df, -far)
    return np.where(p_a == p_c, 1.0, 2 * tail)


def holm(p: Array) -> Array:
    """Holm's adjusted p-values; NaN entries are not tests.

    >>> holm(np.array([0.01, 0.04, 0.03, np.nan])).round(3)  # 3 x .01, max(.06, .03 x 2), max(.06, .04)
    array([0.03, 0.06, 0.06,  nan])
    """
    out = np.full(len(p), np.nan)
    tests = np.flatnonzero(~np.isnan(p))
    order = tests[np.argsort(p[tests], kind="stable")]
    steps = np.arange(len(order), 0, -1) * p[order]
    out[order] = np.minimum(np.maximum.accumulate(steps), 1.0)
    return out


def _wilson(p: Array, n: Array, z: Array | float) -> tuple[Array, Array]:
    z2 = np.asarray(z) ** 2
    centre, half = p + z2 / (2 * n), np.sqrt(z2 * (p * (1 - p) / n + z2 / (4 * n**2)))
    return np.maximum((centre - half) / (1 + z2 / n), 0.0), np.minimum((centre + half) / (1 + z2 / n), 1.0)
