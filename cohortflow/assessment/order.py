"""Memory: does the next state depend on the state before the present one?

One table for each present state, rows = previous state, columns = next state, tested for independence. The
reference draws each period's table at random with its margins, so that months that differ for everybody are
not mistaken for memory. Moves whose previous state is unknown (a stay's first) are left out.

Criteria for whole sequences: AIC = -2 l + 2 k, BIC = -2 l + k log n, all orders on the same n moves,
k = K^order (K - 1). AIC overestimates the order with positive probability (Katz 1981, Technometrics 23, 243);
BIC is consistent without a bound on the order known beforehand (Csiszar & Shields 2000, Ann. Statist. 28,
1601).
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import xlogy

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.tables import Stratified, identified_df, likelihood_ratio, tail_share
from cohortflow.errors import CallError
from cohortflow.tally import Tally


def order(tally: Tally, *, replications: int, rng: np.random.Generator) -> Finding:
    """Order 1 against order 2 (code "previous_state")."""
    blank = Finding("order", "previous_state", "second_order")
    if "contexts" not in tally.meta.tables:
        return replace(blank, reason="customer_rows")
    rows = tally.table("contexts")
    return compare(rows[rows["previous"] >= 0], "previous", len(tally.states), blank, replications, rng)


def compare(
    contexts: pd.DataFrame,
    column: str,
    size: int,
    blank: Finding,
    replications: int,
    rng: np.random.Generator,
) -> Finding:
    """Independence of the next state from `column` given the state, stratified by period.

    column : integers 0, 1 ...;  size : K
    """
    keys = ["state", "period", column, "next_state"]
    cells = contexts.groupby(keys, as_index=False)["n"].sum()
    table, stratum, row, target, n = (cells[c].to_numpy(np.int64) for c in (*keys, "n"))
    counts = Stratified(table, stratum, row, target, n, (size, int(row.max(initial=0)) + 1, size))
    pooled = counts.pooled()
    df = identified_df(pooled)
    if df == 0:
        return replace(blank, reason="too_few_moves")
    statistic = float(likelihood_ratio(pooled))
    p = tail_share(statistic, counts.drawn(replications, rng))
    return replace(blank, statistic=statistic, df=df, p_value=p, floor=1 / (replications + 1))


def order_criteria(sequences: Any, *, most: int = 2, states: int | None = None) -> pd.DataFrame:
    """Log-likelihood, AIC and BIC of chains of order 0 .. `most`, all on the same moves.

    sequences : one sequence of states 0 .. K-1, or a list of them
    Columns: order, log_likelihood, parameters, aic, bic, moves. CallError when no sequence is long enough.

    >>> order_criteria([0, 1] * 20, most=1)["log_likelihood"].round(3).tolist()
    [-27.02, 0.0]
    """
    lines = [np.asarray(s) for s in (sequences if np.ndim(sequences[0]) else [sequences])]
    lines = [s for s in lines if len(s) > most]
    if not lines:
        raise CallError(f"Order {most} needs a sequence of at least {most + 1} states; none is that long.")
    size = int(max(s.max() for s in lines)) + 1 if states is None else states
    counts = np.zeros((size,) * (most + 1))
    for s in lines:
        np.add.at(counts, tuple(s[lag : len(s) - most + lag] for lag in range(most + 1)), 1)
    rows = []
    moves = counts.sum()
    for u in range(most + 1):
        n = counts.sum(axis=tuple(range(most - u)))
        level = float((xlogy(n, n)).sum() - xlogy(n.sum(axis=-1), n.sum(axis=-1)).sum())
        k = size**u * (size - 1)
        rows.append((u, level, k, -2 * level + 2 * k, -2 * level + k * np.log(moves), int(moves)))
    return pd.DataFrame(rows, columns=["order", "log_likelihood", "parameters", "aic", "bic", "moves"])
