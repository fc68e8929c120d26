"""The table `definitions`: every state by its rule and every measure of the tables, with formula and denominator."""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from cohortflow.report.methods import ROLES
from cohortflow.report.rules import rule_words
from cohortflow.study import Study

COLUMNS = ["kind", "name", "table", "definition", "formula", "denominator"]
ONE = "customers at the end of a period"
# name, table, definition, formula, denominator ("" where there is none)
MEASURES: tuple[tuple[str, str, str, str, str], ...] = (
    ("churn", "rates", "Customers who left by an exit in a period, live and away together.",
     "lost / at risk", "live and away at the end of the period before, and seen again"),
    ("retention", "rates", "Customers who did not leave in a period.", "1 - churn",
     "live and away at the end of the period before, and seen again"),
    ("return", "rates", "Customers who came back in a period after an exit.", "returned / had left",
     "had left by the end of the period before, and not come back"),
    ("churn_year", "rates", "The period's churn kept up for a year.", "1 - (1 - churn)^(periods a year)",
     "as of churn"),
    ("retention_year", "rates", "The period's retention kept up for a year.", "retention^(periods a year)",
     "as of retention"),
    ("probability", "transitions", "Rate of a move between the ends of two periods.", "moves i to j / at risk in i",
     "in i at the end of a period of the window, and seen at the end of the next"),
    ("customers", "projection", "Expected customers at the end of a period; of an exit: lost since the opening.",
     "x(t+1) = x(t) P(t) + joined + returned + adjustment", ""),
    ("share", "projection", "The same as a share.", "customers / base",
     "live and away at the end of the period; for an exit: opening plus all who joined or returned since"),
    ("low, high", "projection", "Quantiles of drawn futures: rates, chance, common shocks, joiners.",
     "(1 - level) / 2 and (1 + level) / 2", ""),
    ("opening, closing", "rollforward", "Customers in a state at the start and at the end of a period.",
     "closing = opening + joined + returned - lost + moved_in - moved_out + unobserved_in - unobserved_out "
     "+ adjustment",
     ""),
    ("joined", "rollforward", "Stays that began by a true join, in the state at the period's end.", "count", ""),
    ("returned", "rollforward", "Stays that began after an exit.", "count", ""),
    ("lost", "rollforward", "Stays that ended by an exit.", "count", ""),
    ("moved_in, moved_out", "rollforward", "Moves from and to other states that are not exits.", "count", ""),
    ("unobserved_in, unobserved_out", "rollforward",
     "Customers whose row of the period before, or of this one, is missing in the extract.", "count", ""),
    ("adjustment", "rollforward", "Customers laid over by hand; from then on they move like everybody in their state.",
     "as given in the study", ""),
    ("joined_and_left", "rollforward", "Memo: stays that began and ended within one period; in no sum.", "count", ""),
    ("rates, chance, common_shocks, joiners", "band_parts", "Variances of a projected figure by source.",
     "total = sum of the parts", ""),
    ("limit_from_start", "long_run", "Where today's base would be after a very long time without joiners.",
     "limit of x P^t", ""),
    ("stationary_share", "long_run", "Settled mix of a group that nobody leaves.", "pi P = pi", "the group"),
    ("time_average", "long_run", "Mean mix over time where the mix itself never settles.",
     "limit of the mean of x P^t", ""),
    ("remaining_mix", "long_run", "Long-run mix of those who have not left.", "v Q = r v, sum of v = 1",
     "customers who have not left"),
    ("remaining_retention", "long_run", "Share of them who stay each further period.", "r",
     "customers who have not left"),
    ("settled_base", "long_run", "Base at which constant joiners and leavers balance.", "j (I - Q)^-1", ""),
    ("settled_mix", "long_run", "The settled base as shares.", "settled_base / its sum", "the settled base"),
    ("return_time", "long_run", "Mean number of periods between two visits of a state.", "1 / pi", ""),
    ("periods_to_settle", "long_run", "Periods until the mix is within 1 % of where it settles.",
     "first t with distance below 0.01", ""),
    ("probability", "exits", "Chance that a customer now in a state leaves by this exit in the end.", "(I - Q)^-1 R",
     "customers in the state"),
    ("mean_time, sd_time, median_time", "exits", "Periods until leaving, for a customer now in a state.",
     "row sums of (I - Q)^-1 and their kin", "customers in the state"),
    ("size, live, lost", "cohorts", "Who joined in a period; of them, live now or left since.", "count", ""),
    ("observed", "retention", "Share of joiners who have not left after so many periods, as counted.",
     "product of (1 - left at that age / at risk)", "joiners followed to that age"),
    ("model", "retention", "The same as the model has it.", "cohort of joiners through the rates", "joiners"),
    ("share_later_returning", "windows", "Customers counted as left by silence who came back later all the same.",
     "came back / silent for the window", "silent for the window"),
    ("customer_value", "value", "Expected discounted contribution of one customer now in a state.",
     "V = rho + b P V", "one customer"),
    ("joining_cohort, base", "value", "The same, summed over a period's joiners and over today's base.",
     "sum of customers x customer_value", ""),
    ("customer_sd, joining_cohort_sd, base_sd", "value", "Standard deviation from customer to customer.",
     "square root of the variance", ""),
    ("contribution_over_horizon", "value", "Contribution of the base over the horizon, joiners included.",
     "sum over periods of moves x what they earn, discounted", ""),
    ("difference, cost, net", "scenarios", "With the change less without it, on the same draws; net of what it costs.",
     "with_change - base; value difference - cost", ""),
    ("per_point, elasticity", "levers", "What one point more of a move does to a target; and in relative terms.",
     "0.01 x dF/dp, the balance paying; p / F x dF/dp", ""),
    ("inside, crps, interval_score", "backtest", "Whether the band held, and how good the whole forecast was.",
     "low <= actual <= high; see the methods", "past forecasts"),
)  # fmt: skip


def definitions_frame(study: Study, tables: Iterable[str] = ()) -> pd.DataFrame:
    """kind (state, total, measure), name, table, definition, formula, denominator.

    tables : those whose measures are told

    >>> from cohortflow import States
    >>> study = Study(States(["here", "gone"], exits=["gone"]), totals={"all": ("here",)})
    >>> frame = definitions_frame(study, ["rates"])
    >>> frame[["kind", "name", "definition"]].head(3).values.tolist()
    [['state', 'here', 'live'], ['state', 'gone', 'an exit'], ['total', 'all', 'here']]
    """
    rules = {
        rule.name: rule_words(rule, study.calendar.kind)
        for rule in study.rules
        if study.input.layout == "events"
    }
    rows = []
    for name in study.states.names:
        said = (
            f"{ROLES[study.states.role(name)]}: {rules[name]}"
            if name in rules
            else ROLES[study.states.role(name)]
        )
        rows.append(
            (
                "state",
                name,
                "",
                said,
                "the first rule that holds" if name in rules else "as in the extract",
                "",
            )
        )
    rows += [
        ("total", name, "projection", " + ".join(members), "sum", "")
        for name, members in study.totals.items()
    ]
    there = set(tables)
    rows += [("measure", *measure) for measure in MEASURES if measure[1] in there]
    return pd.DataFrame(rows, columns=COLUMNS)


def assumption_log(study: Study, *, model_chosen: bool = False) -> list[dict[str, str]]:
    """What the forecast assumes, one entry each: assumption, value, set by, kept as JSON-ready text.

    model_chosen : the study asked for the best model, and past forecasts chose this one

    >>> from cohortflow import States
    >>> log = assumption_log(Study(States(["here", "gone"], exits=["gone"])))
    >>> [entry["assumption"] for entry in log][:3]
    ['rates: model', 'rates: periods used', 'joiners: method']
    """
    spec, label = study.model, study.calendar.label
    window = "all counted" if spec.window is None else f"the last {spec.window}"
    found = [
        ("rates: model", spec.name, "past forecasts" if model_chosen else _by(study, "model.name")),
        ("rates: periods used", window, _by(study, "model.window")),
        ("joiners: method", study.joiners.method, _by(study, "joiners.method")),
    ]
    if spec.half_life is not None:
        found.append(
            ("rates: half-life of a move's weight", f"{spec.half_life:g}", _by(study, "model.half_life"))
        )
    if spec.exclude:
        found.append(
            ("rates: periods left out", ", ".join(map(label, spec.exclude)), _by(study, "model.exclude"))
        )
    if study.value is not None:
        found.append(
            (
                "value: discount rate a year",
                f"{study.value.discount_rate:g}",
                _by(study, "value.discount_rate"),
            )
        )
        found.append(("value: timing", study.value.timing, _by(study, "value.timing")))
        amounts = "observed" if study.value.per_period is None else "as given"
        found.append(("value: contribution a customer a period", amounts, _by(study, "value.per_period")))
    for row in study.adjustments:
        what = f"{row.customers:+g} {row.state} in {label(row.period)}: {row.reason}"
        found.append(("manual adjustment", what, row.approved_by or "not approved by anybody named"))
    return [{"assumption": name, "value": value, "set_by": by} for name, value, by in found]


def _by(study: Study, key: str) -> str:
    return study.origin_of.get(key, "default")


def adjustments_frame(study: Study) -> pd.DataFrame:
    """The table `adjustments`: period, state, customers, reason, approved_by; empty without any."""
    rows = [
        (study.calendar.label(a.period), a.state, a.customers, a.reason, a.approved_by)
        for a in study.adjustments
    ]
    return pd.DataFrame(rows, columns=["period", "state", "customers", "reason", "approved_by"])
