"""Small frames with the contract's columns, made from a chain of any size, for tests of the report.

The figures are consistent with one another (rows sum to one, the roll-forward foots), not meant as truths:
no expected number of a test comes from here.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.periods import Calendar
from cohortflow.states import States

VEG_BOX = States(
    ["taster", "weekly", "fortnightly", "quiet", "paused", "cancelled", "card_lapsed"],
    exits=["cancelled", "card_lapsed"], entries=["taster"], away=["paused"],
    impossible=[("weekly", "taster"), ("fortnightly", "taster"), ("quiet", "taster"), ("paused", "taster")],
)  # fmt: skip
SMALL = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
HOSTILE = States(
    ["<script>alert('x')</script>", "=HYPERLINK(\"http://x\")", "n" * 300, "عميل أسبوعي نشط", "毎週届ける箱",
     "🥕🥦 & more", "$\\frac{1}{0}$ %s {0}", "gone"],
    exits=["gone"], entries=["<script>alert('x')</script>"], away=["毎週届ける箱"],
)  # fmt: skip
FIFTEEN = States(
    [f"state number {i} of the long list" for i in range(1, 13)] + ["cancelled", "card lapsed", "moved away"],
    exits=["cancelled", "card lapsed", "moved away"], entries=["state number 1 of the long list"],
)  # fmt: skip
CAL = Calendar("month")
START = CAL.parse("2024-10")


def chain_of(states: States, seed: int = 3) -> np.ndarray:
    """(K, K): mostly staying, some moves, exits absorbing, impossible moves 0."""
    size = len(states)
    rng = np.random.default_rng(seed)
    matrix = rng.gamma(0.6, 1.0, (size, size)) * 0.06 + np.eye(size)
    matrix[:, states.exit_mask] *= 0.25
    matrix[rng.random((size, size)) < 0.15] = 0
    np.fill_diagonal(matrix, np.maximum(matrix.diagonal(), 0.5))
    matrix[:, -1] += 0.02
    matrix *= states.allowed
    for name in states.exits:
        matrix[states.index(name)] = np.eye(size)[states.index(name)]
    return matrix / matrix.sum(axis=1, keepdims=True)


def transitions(states: States, at_risk: int = 4000) -> pd.DataFrame:
    rows = []
    matrix = chain_of(states)
    for i, origin in enumerate(states.names):
        n = 0 if origin in states.exits else at_risk // (i + 1)
        counts = np.floor(matrix[i] * n)
        counts[i] += n - counts.sum()
        for j, target in enumerate(states.names):
            if origin in states.exits:
                continue
            p = counts[j] / n if n else np.nan
            half = 1.96 * np.sqrt(max(p * (1 - p), 1e-9) / n)
            structural = not states.allowed[i, j]
            rows.append(
                ("all", origin, target, counts[j], n, p, 0.0 if structural else max(p - half, 0.0),
                 0.0 if structural else min(p + half + 3 / n, 1.0), 0.95, "wilson", half / 1.96, 1.1,
                 "structural_zero" if structural else "")
            )  # fmt: skip
    columns = ["segment", "from", "to", "count", "at_risk", "probability", "low", "high", "level", "method",
               "std_error", "design_effect", "note"]  # fmt: skip
    return pd.DataFrame(rows, columns=columns)


def _bases(states: States, past: int, ahead: int) -> tuple[np.ndarray, np.ndarray]:
    """(past + ahead + 1, K) bases of those who have not left, and joiners a period (K,)."""
    matrix = chain_of(states)
    keep = ~states.exit_mask
    joiners = np.zeros(len(states))
    joiners[states.index(states.entries[0])] = 320
    base = np.where(keep, 700.0, 0.0)
    out = [base]
    for _ in range(past + ahead):
        base = (base @ matrix) * keep + joiners
        out.append(base)
    return np.array(out), joiners


def rollforward(states: States, past: int = 24, ahead: int = 8) -> pd.DataFrame:
    matrix, (bases, joiners) = chain_of(states), _bases(states, past, ahead)
    groups = {n: [states.index(n)] for n in states.remaining}
    groups["all_live"] = [states.index(n) for n in states.live]
    rows = []
    for t in range(1, len(bases)):
        label, kind = CAL.label(START + t), "actual" if t <= past else "forecast"
        flow = bases[t - 1][:, None] * matrix
        for state, own in groups.items():
            other = [k for k in range(len(states)) if k not in own and not states.exit_mask[k]]
            lines = [("opening", "", bases[t - 1][own].sum()), ("joined", "", joiners[own].sum() * 0.9),
                     ("returned", "", joiners[own].sum() * 0.1)]  # fmt: skip
            lines += [("lost", e, flow[own, states.index(e)].sum()) for e in states.exits]
            lines += [("moved_in", "", flow[np.ix_(other, own)].sum()),
                      ("moved_out", "", flow[np.ix_(own, other)].sum()),
                      ("closing", "", bases[t][own].sum())]  # fmt: skip
            rows += [("all", label, kind, state, line, exit_, value) for line, exit_, value in lines]
    return pd.DataFrame(rows, columns=["segment", "period", "kind", "state", "line", "exit", "customers"])


def projection(states: States, past: int = 24, ahead: int = 8, level: float = 0.9) -> pd.DataFrame:
    matrix, (bases, _) = chain_of(states), _bases(states, past, ahead)
    rows = []
    lost = np.zeros(len(states))
    for h in range(ahead + 1):
        base = bases[past + h]
        if h:
            lost = lost + (bases[past + h - 1] @ matrix) * states.exit_mask
        total = base.sum()
        live = base[states.live_mask].sum()
        named = [(n, lost[k] if n in states.exits else base[k]) for k, n in enumerate(states.names)]
        for name, value in [*named, ("all_live", live)]:
            half = 1.64 * np.sqrt(value) * np.sqrt(h) * 2
            share, spread = value / total, half / total
            rows.append(
                ("all", CAL.label(START + past + h), h, name, value, max(value - half, 0), value + half, share,
                 share - spread, share + spread, level)
            )  # fmt: skip
    columns = ["segment", "period", "periods_ahead", "state", "customers", "low", "high", "share", "share_low",
               "share_high", "level"]  # fmt: skip
    return pd.DataFrame(rows, columns=columns)


def retention(ages: int = 24) -> pd.DataFrame:
    age = np.arange(ages + 1)
    at_risk = np.maximum(6000 - 250 * age, 4)
    observed = 0.55 * 0.86**age + 0.45 * 0.985**age
    half = 1.96 * np.sqrt(observed * (1 - observed) / at_risk)
    return pd.DataFrame(
        {"segment": "all", "periods_since_joining": age, "at_risk": at_risk, "observed": observed,
         "observed_low": np.maximum(observed - half, 0), "observed_high": np.minimum(observed + half, 1),
         "model": 0.93**age}
    )  # fmt: skip


def exits(states: States) -> pd.DataFrame:
    matrix = chain_of(states)
    stay = ~states.exit_mask
    inverse = np.linalg.inv(np.eye(stay.sum()) - matrix[np.ix_(stay, stay)])
    time = inverse.sum(axis=1)
    reach = inverse @ matrix[np.ix_(stay, ~stay)]
    rows = []
    for i, origin in enumerate(states.remaining):
        for measure, value in (
            ("mean_time", time[i]),
            ("sd_time", 0.95 * time[i]),
            ("median_time", 0.7 * time[i]),
        ):
            rows.append(("all", origin, measure, "", value, value * 0.9, value * 1.12))
        for j, name in enumerate(states.exits):
            p = reach[i, j]
            rows.append(("all", origin, "probability", name, p, p * 0.92, min(p * 1.06, 1.0)))
    return pd.DataFrame(rows, columns=["segment", "from", "measure", "exit", "value", "low", "high"])


def long_run(states: States) -> pd.DataFrame:
    matrix, (_, joiners) = chain_of(states), _bases(states, 24, 8)
    stay = ~states.exit_mask
    settled = joiners[stay] @ np.linalg.inv(np.eye(stay.sum()) - matrix[np.ix_(stay, stay)])
    vector = np.full(stay.sum(), 1 / stay.sum())
    for _ in range(400):
        vector = vector @ matrix[np.ix_(stay, stay)]
        rate, vector = vector.sum(), vector / vector.sum()
    rows = [("closed_group", e, "", i + 1.0, np.nan, np.nan, "") for i, e in enumerate(states.exits)]
    rows.append(("remaining_retention", "", "", rate, rate - 0.004, rate + 0.004, ""))
    rows += [("remaining_mix", n, "", v, v * 0.9, v * 1.1, "")
             for n, v in zip(states.remaining, vector, strict=True)]  # fmt: skip
    rows += [("settled_base", n, "", v, v * 0.8, v * 1.25, "")
             for n, v in zip(states.remaining, settled, strict=True)]  # fmt: skip
    rows += [("settled_mix", n, "", v / settled.sum(), v / settled.sum() * 0.93, v / settled.sum() * 1.07, "")
             for n, v in zip(states.remaining, settled, strict=True)]  # fmt: skip
    rows.append(("periods_to_settle", "", "", 31.0, np.nan, np.nan, ""))
    frame = pd.DataFrame(rows, columns=["measure", "state", "from", "value", "low", "high", "note"])
    frame.insert(0, "segment", "all")
    return frame


def accounting() -> pd.DataFrame:
    rows = [
        ("file", "read", "", "events-1.csv.gz", 41250, 9102),
        ("file", "used", "", "events-1.csv.gz", 40800, 9033),
        ("file", "rejected", "time_unreadable", "events-1.csv.gz", 120, 118),
        ("file", "rejected", "id_missing", "events-1.csv.gz", 60, 0),
        ("file", "duplicate", "", "events-1.csv.gz", 150, 149),
        ("file", "set_aside", "after_as_of", "events-1.csv.gz", 70, 66),
        ("file", "set_aside", "after_exit", "events-1.csv.gz", 50, 41),
    ]
    return pd.DataFrame(rows, columns=["stage", "outcome", "reason", "file", "rows", "customers"])


def approach(states: States, ahead: int = 40) -> pd.DataFrame:
    rows = projection(states, ahead=ahead)
    return rows[rows["state"].isin(states.remaining)].reset_index(drop=True)


def band_parts(states: States, ahead: int = 8) -> pd.DataFrame:
    rows = []
    for k, quantity in enumerate(("all_live", *states.remaining)):
        for h in range(ahead + 1):
            parts = (3.0 * h, 40.0 * h, 60.0 * h**1.5, 25.0 * h**2 * (k == 0))
            rows.append(("all", CAL.label(START + 24 + h), h, quantity, *parts, sum(parts)))
    columns = ["segment", "period", "periods_ahead", "quantity", "rates", "chance", "common_shocks", "joiners", "total"]
    return pd.DataFrame(rows, columns=columns)


def value(states: States, currency: str = "GBP") -> pd.DataFrame:
    rows = [("customer_value", n, *(x + 40 * k for x in (300.0, 280.0, 330.0))) for k, n in enumerate(states.remaining)]
    rows += [("customer_sd", n, 250.0, np.nan, np.nan) for n in states.remaining]
    rows += [("joining_cohort", "", 80_000.0, 76_000.0, 85_000.0), ("joining_cohort_sd", "", 6_000.0, np.nan, np.nan),
             ("base", "", 1.2e6, 1.1e6, 1.3e6), ("base_sd", "", 3e4, np.nan, np.nan),
             ("contribution_over_horizon", "", 510_000.0, 470_000.0, 560_000.0)]  # fmt: skip
    frame = pd.DataFrame(rows, columns=["measure", "state", "value", "low", "high"])
    frame.insert(0, "segment", "all")
    return frame.assign(currency=currency)


def scenarios(states: States) -> pd.DataFrame:
    """One scenario for each of the first three states, named after it."""
    rows = []
    for k, name in enumerate(states.remaining[:3]):
        for period, quantity, base, off in (("2026-12", "all_live", 4000.0, 10.0 - 30 * k),
                                            ("2027-06", "all_live", 4100.0, 40.0 - 60 * k),
                                            ("total", "value", 510_000.0, 9_000.0 * k), ("total", "cost", 0.0, 900.0),
                                            ("total", "net", 510_000.0, 9_000.0 * k - 900)):  # fmt: skip
            rows.append(("all", name, period, quantity, base, base + off, off, off - 5, off + 6, np.nan, np.nan))
    columns = ["segment", "scenario", "period", "quantity", "base", "with_change", "difference", "low", "high", "cost",
               "net"]  # fmt: skip
    return pd.DataFrame(rows, columns=columns)


def adequacy() -> pd.DataFrame:
    rows = [
        ("all", "order", "previous_state", 30.1, 12.0, 0.003, 12.0, "doubtful", "second_order"),
        ("all", "drift", "eras", 51.0, 20.0, 0.0005, 310.0, "fails", "recent"),
        ("all", "segments", "channel", 18.0, 22.0, 0.71, 3.0, "holds", ""),
        ("all", "customers", "rates_differ", np.nan, np.nan, np.nan, np.nan, "not_testable", "customer_rows"),
    ]
    columns = ["segment", "check", "what", "statistic", "df", "p_value", "effect", "verdict", "advice"]
    return pd.DataFrame(rows, columns=columns)


def tables(states: States) -> dict[str, pd.DataFrame]:
    """Everything that a whole run has."""
    return {
        "accounting": accounting(),
        "transitions": transitions(states),
        "projection": projection(states),
        "rollforward": rollforward(states),
        "long_run": long_run(states),
        "exits": exits(states),
        "retention": retention(),
    }


def facts(states: States, **changes):
    from cohortflow.report.content import Facts

    settings = {
        "title": "Hollin Weir veg box", "states": states, "calendar": CAL, "level": 0.9, "horizon": 8,
        "first": "2024-11", "last": "2026-10", "as_of": "2026-10-31", "seed": 7, "customers": 9033, "moves": 9133,
        "verdict": "exits_only",
        "parts": ("rates", "chance"), "version": "0.1.0",
    }  # fmt: skip
    return Facts(**{**settings, **changes})
