"""Definitions of states and measures, the assumption log, the manual adjustments."""

from dataclasses import replace

import cohortflow as cf
from cohortflow.report.definitions import MEASURES, adjustments_frame, assumption_log, definitions_frame
from cohortflow.study import Adjustment, Condition, ModelSpec, StateRule, Study, ValueSpec

STATES = cf.States(["cancelled", "weekly"], exits=["cancelled"])
RULES = (StateRule("cancelled", "exit", ((Condition("last_event", ("cancelled",), among=("joined", "cancelled")),),)),
         StateRule("weekly"))  # fmt: skip
STUDY = Study(
    STATES, cf.Calendar("month"), rules=RULES, totals={"paying": ("weekly",)},
    adjustments=(Adjustment(680, "weekly", 12.0, "a fair", "the head"), Adjustment(681, "weekly", -3.0, "floods")),
)  # fmt: skip


def test_states_are_told_by_their_rules_and_totals_by_their_members():
    rows = definitions_frame(STUDY).set_index("name")
    assert rows.loc["cancelled", "definition"].startswith(
        "an exit: the latest of joined and cancelled is cancelled"
    )
    assert rows.loc["weekly", "definition"] == "live: everybody else"
    assert rows.loc["paying", ["kind", "definition"]].tolist() == ["total", "weekly"]
    assert set(rows["kind"]) == {"state", "total"}


def test_only_measures_of_the_tables_that_are_there():
    rows = definitions_frame(STUDY, ["rates", "exits"])
    assert set(rows.loc[rows["kind"] == "measure", "table"]) == {"rates", "exits"}
    churn = rows[(rows["name"] == "churn") & (rows["table"] == "rates")].iloc[0]
    assert churn["formula"] == "lost / at risk" and "end of the period before" in churn["denominator"]


def test_every_measure_has_words_and_a_formula_once():
    assert all(
        all(text for text in (name, table, said, formula)) for name, table, said, formula, _ in MEASURES
    )
    assert len({(name, table) for name, table, *_ in MEASURES}) == len(MEASURES)


def test_the_assumption_log_says_who_set_what():
    value = ValueSpec("GBP", None, margin=0.4, discount_rate=0.08)
    model = ModelSpec("recent", window=12, half_life=6.0, exclude=(663,))
    study = replace(STUDY, value=value, model=model, origin_of={"model.name": "option"})
    log = {entry["assumption"]: (entry["value"], entry["set_by"]) for entry in assumption_log(study)}
    assert log["rates: model"] == ("recent", "option") and log["rates: periods used"] == (
        "the last 12",
        "default",
    )
    assert (
        log["rates: half-life of a move's weight"][0] == "6"
        and log["rates: periods left out"][0] == "2025-04"
    )
    assert log["value: discount rate a year"][0] == "0.08"
    assert log["value: contribution a customer a period"][0] == "observed"
    assert log["manual adjustment"] == ("-3 weekly in 2026-10: floods", "not approved by anybody named")
    chosen = assumption_log(study, model_chosen=True)[0]
    assert chosen == {"assumption": "rates: model", "value": "recent", "set_by": "past forecasts"}


def test_adjustments_are_a_table():
    rows = adjustments_frame(STUDY)
    assert rows.values.tolist() == [
        ["2026-09", "weekly", 12.0, "a fair", "the head"],
        ["2026-10", "weekly", -3.0, "floods", ""],
    ]
    assert not len(adjustments_frame(replace(STUDY, adjustments=())))
