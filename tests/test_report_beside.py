"""Budget and windows beside a forecast."""

import pandas as pd

from cohortflow.report.beside import budget_beside, windows_table


def test_a_budget_of_nothing_has_no_per_cent():
    frame = pd.DataFrame({"period": ["1", "2"], "quantity": "all_live", "amount": [0.0, 200.0],
                          "forecast": [5.0, 190.0], "difference": [5.0, -10.0]})  # fmt: skip
    assert [r[4:] for r in budget_beside(frame).rows] == [("+5", ""), ("-10", "-5.0%")]


def test_a_window_nobody_reached_is_not_known():
    frame = pd.DataFrame({"exit": ["lapsed"] * 2, "window": [1, 2], "share_later_returning": [0.25, float("nan")],
                          "low": [0.2, float("nan")], "high": [0.3, float("nan")],
                          "reporting_delay": [1, 2]})  # fmt: skip
    table = windows_table(frame, kind="week")
    assert table.rows == (("lapsed", "1", "25.0% (20.0 to 30.0%)", "1"), ("lapsed", "2", "not known", "2"))
    assert table.heads[1] == "silent weeks"
