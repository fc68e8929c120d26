"""k steps: does P to the power k foretell where customers are k periods later?

    D_k = sum_ij (N^(k)_ij - n^(k)_i (P^k)_ij)^2 / (n^(k)_i (P^k)_ij)

The windows overlap and P is estimated from the same moves, so there is no chi-square law: the reference
simulates the same stays (first state, period, window) from the estimated chain and estimates P anew.
The signed gaps show the direction: customers who differ make a pooled chain lose too many of them late.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.paths import Panel, Paths, shares
from cohortflow.assessment.tables import Array, Counts, tail_share
from cohortflow.states import States

STEPS = (3, 6, 12)


def k_steps(
    states: States,
    paths: Paths | None,
    *,
    replications: int,
    rng: np.random.Generator,
    longest: int | None = None,
) -> tuple[list[Finding], pd.DataFrame]:
    """One finding for each k that at most half the history holds (code "k=6"), and the gaps.

    Gaps: k, from, to, at_risk, observed, expected, gap (shares; gap = observed - expected).
    """
    panel = None if paths is None or not len(paths.state) else paths.panel()
    width = 0 if panel is None else len(panel.grid)
    steps = [k for k in STEPS if 2 * k <= width - 1 and k <= (longest or k)]
    if panel is None or not steps:
        reason = "customer_rows" if panel is None else "longer_history"
        return [Finding("k_steps", "k", "mixture", reason=reason)], gap_table(states, {})
    observed = {k: panel.counts(k) for k in steps}
    P = shares(panel.counts())
    distance = np.array([discrepancy(observed[k], P, k) for k in steps])
    drawn = np.array([_drawn(panel, P, steps, rng) for _ in range(replications)])
    findings = [
        Finding(
            "k_steps",
            f"k={k}",
            "mixture",
            float(d),
            np.nan,
            tail_share(d, line),
            floor=1 / (replications + 1),
        )
        for k, d, line in zip(steps, distance, drawn.T, strict=True)
    ]
    return findings, gap_table(states, {k: (observed[k], P) for k in steps})


def discrepancy(counts: Counts, P: Array, k: int) -> float:
    """D_k of (K, K) counts over k steps; cells that P^k makes impossible are left out when empty.

    >>> discrepancy(np.array([[6, 4]] * 2), np.array([[0.5, 0.5]] * 2), 1)  # 2 x ((6-5)^2 + (4-5)^2) / 5
    0.8
    """
    expected = counts.sum(axis=1, keepdims=True) * power(P, k)
    gap = (counts - expected) ** 2
    if (counts[expected <= 0] > 0).any():
        return float("inf")
    return float(np.divide(gap, expected, out=np.zeros_like(gap), where=expected > 0).sum())


def power(P: Array, k: int) -> Array:
    """P^k, rows without data staying where they are (nobody was seen to leave them)."""
    return np.linalg.matrix_power(np.where(np.isnan(P).any(axis=1, keepdims=True), np.eye(len(P)), P), k)


def gap_table(states: States, found: dict[int, tuple[Counts, Array]]) -> pd.DataFrame:
    """Observed and expected shares k periods later, by state, for the states that are not exits."""
    names = np.array(states.names, dtype=object)
    origin, target = np.indices((len(names), len(names))).reshape(2, -1)
    kept = np.logical_not(states.exit_mask[origin])
    frames = []
    for k, (counts, P) in found.items():
        expected, at_risk = power(P, k), counts.sum(axis=1)
        share = shares(counts)
        table = {"k": k, "from": names[origin], "to": names[target], "at_risk": at_risk[origin]}
        table |= {"observed": share.ravel(), "expected": expected.ravel(), "gap": (share - expected).ravel()}
        frames.append(pd.DataFrame(table)[kept])
    columns = ["k", "from", "to", "at_risk", "observed", "expected", "gap"]
    return pd.concat(frames, ignore_index=True) if frames else pd.DataFrame(columns=columns)


def _drawn(panel: Panel, P: Array, steps: list[int], rng: np.random.Generator) -> list[float]:
    other = panel.simulated(P, rng)
    again = shares(other.counts())
    return [discrepancy(other.counts(k), again, k) for k in steps]
