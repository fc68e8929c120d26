"""A comparison in words."""

import pandas as pd
import pytest

from cohortflow.report import comparison as words
from cohortflow.report.table import plain_text
from tests.test_report_chart_bridge import frame

LINES = pd.DataFrame(
    [("q2", "1", "3", line, leaving, said, was, was - said, (was - said) / said if said else float("nan"))
     for line, leaving, said, was in (("opening", "", 100.0, 100.0), ("joined", "", 10.4, 12.0),
                                      ("lost", "gone", 5.4, 4.0), ("moved_out", "", 0.4, 0.0),
                                      ("closing", "", 104.6, 108.0))],
    columns=["run", "first", "last", "line", "exit", "forecast", "actual", "difference", "relative"],
)  # fmt: skip


def test_the_bridge_as_a_table_foots_in_every_column():
    table = words.bridge_table(frame(), period="2026-12", quantities=["all_live", "contribution"])
    for column in (1, 2):
        figures = [int(row[column].replace(",", "").replace("+", "")) for row in table.rows]
        assert figures[0] + sum(figures[1:-1]) == figures[-1]
    assert table.rows[0][0] == "last forecast" and table.strong == (0, len(table.rows) - 1)


def test_rates_by_move_are_cut_and_the_rest_told_together():
    rows = [("all_live", "5", "rates", "", "a", f"s{k:02d}", 20.0 - k) for k in range(15)]
    details = pd.DataFrame(rows, columns=["quantity", "period", "part", "kind", "from", "to", "amount"])
    table = words.moves_bridge_table(details, period="5")
    assert len(table.rows) == 13 and table.rows[0] == ("a to s00", "+20")
    assert table.rows[-1] == ("3 other moves", "+21")  # 8 + 7 + 6
    whole = details.head(1).assign(**{"from": "", "to": ""})
    assert words.moves_bridge_table(whole, period="5").rows[0][0] == "all moves together"


def test_lines_foot_as_printed():
    # 104.6 -> 105 from 100: 10.4 - 5.4 - 0.4 = 4.6 must print as 5
    table = words.lines_table(LINES)
    said = {row[0]: int(row[1]) for row in table.rows}
    assert (
        said["opening base"] + said["joined"] - said["left: gone"] - said["went away"]
        == said["closing base"]
        == 105
    )
    assert "1 to 3" in table.caption


def test_what_is_not_known_is_said_in_the_lines():
    unknown = LINES.assign(forecast=LINES["forecast"].where(LINES["line"] != "closing"))
    unknown["difference"] = unknown["actual"] - unknown["forecast"]
    table = words.lines_table(unknown)
    assert table.rows[-1][1] == "not known" and table.rows[-1][2] == "108"


@pytest.mark.parametrize(
    ("code", "text"),
    [("segment_mix_in_rates", "could not be told apart"), ("money_not_comparable", "one currency"),
     ("total_not_comparable:paying", "left out: paying.")],
)  # fmt: skip
def test_notes_are_sentences(code, text):
    assert text in words.note_words(code)


def test_calibration_in_words():
    rows = [("all_live", pd.NA, 0.9, 4, 3, 0.75, 0.19, 0.99), ("all_live", 1, 0.9, 2, 2, 1.0, 0.16, 1.0)]
    columns = ["quantity", "periods_ahead", "level", "forecasts", "inside", "share", "low", "high"]
    table = pd.DataFrame(rows, columns=columns)
    assert words.calibration_table(table).rows == (
        ("all live customers", "all", "90%", "4", "3", "75%", "19 to 99%"),
    )
    assert words.calibration_table(table, by_horizon=True).rows[1][1] == "1"
    assert "too narrow" in plain_text(words.calibration_table(table))


def test_budget_and_outcome_in_words():
    budget = pd.DataFrame(
        [("2026-10", "all_live", 100.0, "forecast", 96.0, 90.0, 99.0, -4.0, -0.04, False),
         ("2026-09", "all_live", 0.0, "actual", 5.0, float("nan"), float("nan"), 5.0, float("nan"), pd.NA)],
        columns=["period", "quantity", "budget", "kind", "value", "low", "high", "difference", "relative", "inside"],
    )  # fmt: skip
    first, second = words.budget_table(budget).rows
    assert first == ("2026-10", "all live customers", "100", "96", "90 to 99", "forecast", "-4", "-4.0%")
    assert second[4:] == ("", "counted", "+5", "")
    columns = [
        "run",
        "period",
        "quantity",
        "forecast",
        "low",
        "high",
        "actual",
        "difference",
        "relative",
        "inside",
    ]
    row = ("q2", "2026-10", "all_live", 96.0, 90.0, 99.0, 100.0, 4.0, 4 / 96, False)
    outcome = pd.DataFrame([row], columns=columns)
    assert words.outcome_table(outcome, quantities=["all_live"]).rows[0][-1] == "outside"


def test_settings_in_words():
    table = pd.DataFrame([("level", "setting", "0.9", "0.8")], columns=["setting", "kind", "last", "this"])
    assert words.settings_table(table).rows == (("level", "setting", "0.9", "0.8"),)
