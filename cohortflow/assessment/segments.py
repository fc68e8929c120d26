"""Segments: do customers of different segments move alike?

One table for each origin, rows = values of a segment column. Customers, not moves, are dealt out to the
segments at random: the chi-square law would reject too often when customers differ within segments. Labels
change hands only among customers first seen in the same period, so that a channel that grew while rates moved
is not mistaken for a channel that behaves differently.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.paths import Paths
from cohortflow.assessment.tables import Array, identified_df, likelihood_ratio, tail_share
from cohortflow.tally import Tally


def segments(
    tally: Tally, paths: Paths | None, *, replications: int, rng: np.random.Generator
) -> list[Finding]:
    """One finding a segment or attribute column (code: its name); arms of experiments are left out."""
    columns = [(i, name) for i, (name, role) in enumerate(tally.meta.segment_columns) if role != "arm"]
    if not columns:
        return [Finding("segments", "none", "segment", reason="segment_column")]
    if paths is None or not len(paths.state):
        return [Finding("segments", name, "segment", reason="customer_rows") for _, name in columns]
    return [_one(tally, paths, i, name, replications, rng) for i, name in columns]


def _one(
    tally: Tally, paths: Paths, where: int, name: str, replications: int, rng: np.random.Generator
) -> Finding:
    values = sorted({v[where] for v in tally.meta.segments})
    code = np.array([values.index(v[where]) for v in tally.meta.segments])
    label = code[paths.segment]
    moved = _moves_by_customer(paths, len(tally.states))
    observed = _by_label(moved, label, len(values))
    if identified_df(observed) == 0:
        return Finding("segments", name, "segment", option=name, reason="too_few_moves")
    statistic = float(likelihood_ratio(observed))
    drawn = np.array(
        [
            likelihood_ratio(_by_label(moved, dealt_out(label, paths.entry, rng), len(values)))
            for _ in range(replications)
        ]
    )
    p = tail_share(statistic, drawn)
    df = identified_df(observed)
    return Finding("segments", name, "segment", statistic, df, p, option=name, floor=1 / (replications + 1))


def dealt_out(
    label: NDArray[np.int64], group: NDArray[np.int64], rng: np.random.Generator
) -> NDArray[np.int64]:
    """The labels dealt out anew within each group.

    >>> dealt_out(np.array([5, 6, 7]), np.array([0, 1, 2]), np.random.default_rng(1)).tolist()
    [5, 6, 7]
    """
    out = np.empty_like(label)
    out[np.argsort(group, kind="stable")] = label[np.argsort(group + rng.random(len(group)))]
    return out


def _moves_by_customer(paths: Paths, size: int) -> sparse.csr_matrix:
    """(C, K*K) moves of each customer."""
    customer, origin, target, n = paths.moves
    shape = (paths.customers, size * size)
    return sparse.csr_matrix((n.astype(float), (customer, origin * size + target)), shape=shape)


def _by_label(moved: sparse.csr_matrix, label: NDArray[np.int64], labels: int) -> Array:
    """(K, G, K) tables: one an origin, rows = labels."""
    size = int(round(moved.shape[1] ** 0.5))
    member = sparse.csr_matrix(
        (np.ones(len(label)), (label, np.arange(len(label)))), shape=(labels, len(label))
    )
    return (member @ moved).toarray().reshape(labels, size, size).transpose(1, 0, 2)
