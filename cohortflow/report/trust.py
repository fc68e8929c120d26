"""Whether one may believe it, in words: tested assumptions, past forecasts, the model chosen by them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.report.chart.backtest import forecaster
from cohortflow.report.rounding import count, decimal, missing, percent, signed, unit
from cohortflow.report.table import Table
from cohortflow.report.tabulate import name
from cohortflow.report.text import label, listing
from cohortflow.report.wording import FORECASTERS
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
OBJECTIONS = {
    "too_few_origins": "there are fewer than 8 past origins",
    "coverage": "its bands held too often or too seldom",
    "not_better_than_last_mix": "it was no better than the last mix carried forward",
    "": "",
}


def assumption(row: Mapping[Any, Any]) -> str:
    """A check as printed: "no memory", "segments alike (channel)".

    >>> assumption({"check": "segments", "what": "channel"}), assumption({"check": "order", "what": "previous_state"})
    ('segments alike (channel)', 'no memory')
    """
    what = PARTS.get(str(row["what"]), str(row["what"]))
    return CHECKS.get(str(row["check"]), str(row["check"])) + (f" ({label(what)})" if what else "")


def adequacy_sentence(frame: pd.DataFrame) -> str:
    """How many assumptions hold, are doubtful, fail: one sentence for the front.

    >>> rows = {"check": ["order", "drift"], "what": ["previous_state", "eras"], "verdict": ["fails", "holds"]}
    >>> adequacy_sentence(pd.DataFrame(rows))
    'Of 2 assumptions that can be tested 1 holds, 0 are doubtful and 1 fails: no memory.'
    """
    tried = frame[frame["verdict"] != "not_testable"]
    holds, doubtful, fails = ((tried["verdict"] == v).sum() for v in ("holds", "doubtful", "fails"))
    failing = [assumption(r) for r in tried[tried["verdict"] == "fails"].to_dict("records")]
    return (
        f"Of {len(tried)} assumptions that can be tested {holds} {'holds' if holds == 1 else 'hold'}, {doubtful} "
        f"{'is' if doubtful == 1 else 'are'} doubtful and {fails} {'fails' if fails == 1 else 'fail'}"
        f"{': ' + listing(failing) if failing else ''}."
    )


def adequacy_table(frame: pd.DataFrame, *, segment: str = "all") -> Table:
    """Each assumption, the evidence against it, and what its failure would do to the forecast."""
    rows = []
    for row in frame[frame["segment"] == segment].to_dict("records"):
        rows.append(
            (
                assumption(row),
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


def scores_table(tested: Any, *, quantity: str = ALL_LIVE, models: Sequence[str] = ()) -> Table:
    """Models (all, or those named) and rivals at the first, middle and last horizon: how often the band held, error,
    skill."""
    scores = tested.scores[tested.scores["quantity"] == quantity]
    if models:
        scores = scores[scores["model"].isin([*models, *FORECASTERS])]
    horizons = sorted({1, (1 + tested.horizon) // 2, tested.horizon})
    rows = []
    for row in scores[scores["horizon"].isin(horizons)].sort_values(["horizon"], kind="stable").to_dict("records"):
        rows.append(
            (
                forecaster(str(row["model"])),
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


def validated_sentence(
    tested: Any, model: str, *, kind: str = "month", quantity: str = ALL_LIVE, short: bool = False
) -> str:
    """ "Validated to 6 months ...", or to no distance and why; `short`: its first words alone."""
    reached, reason = tested.validated_to(model, quantity)
    distance = f"{reached} {unit(kind, reached)}" if reached else "no distance"
    if short:
        return f"validated to {distance}"
    why = _objection(tested, model, quantity, reached + 1, reason)
    what = "live customers" if quantity == ALL_LIVE else f"customers in {name(quantity)}"
    if not reached:
        return f"Validated to {distance}: past forecasts of {what} do not vouch for this one; {why}."
    text = (
        f"Validated to {distance}: so far ahead, past forecasts of {what} made in this way held their bands as meant "
        "and beat the last mix carried forward"
    )
    return f"{text}. Beyond, {why}." if why else f"{text}, as far as it was tried."


def _objection(tested: Any, model: str, quantity: str, horizon: int, reason: str) -> str:
    """What stands against the next distance, with its figures."""
    rows = tested.scores
    rows = rows[(rows["model"] == model) & (rows["quantity"] == quantity) & (rows["horizon"] == horizon)]
    words = OBJECTIONS.get(reason, reason)
    if reason != "coverage" or rows.empty:
        return words
    row = rows.iloc[0]
    held = round(float(row["coverage"]) * int(row["origins"]))
    return f"{words} ({held} of {int(row['origins'])}, meant: {percent(tested.level, 0)})"


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
