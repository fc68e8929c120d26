"""Whether one may believe it, in words: tested assumptions, past forecasts, the model chosen by them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from cohortflow.report.rounding import count, decimal, missing, percent, signed
from cohortflow.report.table import Table
from cohortflow.report.tabulate import name
from cohortflow.states import ALL_LIVE

CHECKS = {
    "order": "no memory",
    "drift": "no drift",
    "seasons": "no seasons",
    "segments": "segments alike",
    "tenure": "tenure is no matter",
    "time_in_state": "time in a state is no matter",
    "customers": "customers alike",
    "k_steps": "right periods ahead",
}
PARTS = {
    "periods": "each period",
    "eras": "early, late",
    "calendar_positions": "",
    "bands": "",
    "rates_differ": "",
    "previous_state": "",
}
VERDICTS = {"holds": "holds", "doubtful": "doubtful", "fails": "fails", "not_testable": "cannot be tested"}
ADVICE = {
    "second_order": "model second_order",
    "common_shocks": "bands with common shocks",
    "recent": "model recent",
    "seasonal": "model seasonal",
    "segment": "model segment",
    "tenure": "model tenure",
    "time_in_state": "model time_in_state",
    "mixture": "model mixture",
    "customer_rows": "needs customers' rows, not bare counts",
    "longer_history": "needs a longer history",
    "two_cycles": "needs two full cycles of seasons",
    "no_calendar": "these periods have no calendar",
    "segment_column": "needs a segment column",
    "too_few_moves": "needs more moves",
}
RIVALS = {
    "last_mix": "last mix",
    "constant_churn": "constant churn",
    "last_year": "last year",
    "cohort_curve": "cohort curve",
}
OBJECTIONS = {
    "too_few_origins": "there are fewer than 8 past origins",
    "coverage": "its bands held too often or too seldom",
    "not_better_than_last_mix": "it was no better than the last mix carried forward",
    "": "",
}


def adequacy_table(frame: pd.DataFrame, *, segment: str = "all") -> Table:
    """Each assumption, the evidence against it, and what its failure would do to the forecast."""
    rows = []
    for row in frame[frame["segment"] == segment].to_dict("records"):
        what = PARTS.get(str(row["what"]), str(row["what"]))
        assumption = CHECKS.get(str(row["check"]), str(row["check"])) + (f" ({what})" if what else "")
        rows.append(
            (
                assumption,
                VERDICTS[str(row["verdict"])],
                "" if missing(row["p_value"]) else _p_value(float(row["p_value"])),
                "" if missing(row["effect"]) else signed(float(row["effect"])),
                ADVICE.get(str(row["advice"]), str(row["advice"] or "")),
            )
        )
    return Table(
        "What a plain chain assumes, tested",
        ("assumption", "verdict", "p-value", "effect", "remedy"),
        tuple(rows),
        texts=(0, 1, 4),
        note="Effect: by how many live customers the remedy moves the forecast at the horizon. An assumption "
        "fails when that is half the band's half-width or more; with many customers every small departure has "
        "a small p-value.",
    )


def _p_value(value: float) -> str:
    return "below 0.001" if value < 0.001 else decimal(value, 3)


def scores_table(tested: Any, *, quantity: str = ALL_LIVE) -> Table:
    """Models and rivals at the first, middle and last horizon: how often the band held, error, skill."""
    scores = tested.scores[tested.scores["quantity"] == quantity]
    horizons = sorted({1, (1 + tested.horizon) // 2, tested.horizon})
    rows = []
    for row in scores[scores["horizon"].isin(horizons)].sort_values(["horizon"], kind="stable").to_dict("records"):
        rows.append(
            (
                RIVALS.get(str(row["model"]), f"model {row['model']}"),
                count(row["horizon"]),
                count(row["origins"]),
                "" if missing(row["coverage"]) else percent(float(row["coverage"]), 0),
                "" if missing(row["mean_error"]) else signed(float(row["mean_error"])),
                "" if missing(row["mase"]) else decimal(float(row["mase"]), 2),
                "" if missing(row["skill"]) else percent(float(row["skill"]), 0),
            )
        )
    heads = ("forecast", "ahead", "origins", "band held", "mean error", "scaled error", "skill")
    return Table(
        f"Past forecasts of {name(quantity)}",
        heads,
        tuple(rows),
        texts=(0,),
        note="Rivals that need no chain: the last mix carried forward, a constant churn rate on the total, the same "
        "period of last year, the observed cohort curve. "
        f"Bands at {percent(tested.level, 0)}. Scaled error: mean absolute error over that of taking the last "
        "period's figure. Skill: by how much the interval score beats that of the last mix carried forward.",
    )


def validated_sentence(tested: Any, model: str, *, kind: str = "period") -> str:
    """ "Validated to 6 months." or why not.

    kind : the word for a period
    """
    reached, reason = tested.validated_to(model)
    why = OBJECTIONS.get(reason, reason)
    if reached == 0:
        return f"The past does not vouch for this forecast at any distance: {why}."
    words = f"The past vouches for this forecast up to {reached} {kind}{'' if reached == 1 else 's'} ahead"
    return f"{words}; beyond, {why}." if why else f"{words}, as far as it was tried."


def choice_sentence(choice: Any) -> str:
    """Which model was chosen, by how much, with what doubt."""
    frame = choice.to_frame()
    others = frame[frame["candidate"] & (frame["model"] != choice.model)]
    best = frame.set_index("model").loc[choice.model]
    if others.empty:
        return f'The model "{choice.model}" is the only one that could be tried.'
    second = others.sort_values("loss").iloc[0]
    lead = (float(second["loss"]) - float(best["loss"])) / float(second["loss"])
    text = f'The model "{choice.model}" was chosen by backtest: its mean score is {percent(lead, 0)} better than '
    text += f'that of the next, "{second["model"]}"'
    if not np.isnan(float(best["chance_best"])):
        text += f"; it came first in {percent(float(best['chance_best']), 0)} of resampled pasts"
    return text + "."
