"""Small tables beside a forecast: the budget, and how long to wait before silence counts as leaving."""

from __future__ import annotations

import pandas as pd

from cohortflow.report.rounding import count, missing, percent, signed, unit
from cohortflow.report.table import Table
from cohortflow.report.tabulate import name, with_interval


def budget_beside(budget: pd.DataFrame) -> Table:
    """The budget beside the forecast of the same period: period, quantity, amount, forecast, difference."""
    rows = [
        (str(r["period"]), name(r["quantity"]), count(r["amount"]), count(r["forecast"]), signed(r["difference"]),
         "" if missing(r["difference"]) or not r["amount"] else signed(r["difference"] / r["amount"], percent))
        for r in budget.to_dict("records")
    ]  # fmt: skip
    heads = ("period", "figure", "budget", "forecast", "off", "off %")
    return Table("Forecast against the budget", heads, tuple(rows), texts=(0, 1), note="Off: forecast less budget.")


def windows_table(windows: pd.DataFrame, *, kind: str) -> Table:
    """For each exit by silence and window: the share of those called gone who come back later."""
    rows = [
        (name(r["exit"]), count(r["window"]), with_interval(r["share_later_returning"], r["low"], r["high"], percent),
         count(r["reporting_delay"]))
        for r in windows.to_dict("records")
    ]  # fmt: skip
    heads = ("exit", f"silent {unit(kind)}", "come back later", f"known after, {unit(kind)}")
    return Table(
        "How long to wait before silence counts as leaving", heads, tuple(rows), texts=(0,),
        note="A short wait calls customers gone who come back; a long one brings the news late. Who comes back after "
        "the end of the extract is not in the share.",
    )  # fmt: skip
