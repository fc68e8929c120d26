"""Opening to closing as a drawing."""

import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.rollforward import rollforward_chart, steps_of
from tests import report_fixtures as made

LINES = [("opening", "", 100.4), ("joined", "", 10.3), ("returned", "", 2.2), ("lost", "cancelled", 5.4),
         ("lost", "card", 1.2), ("moved_in", "", 3.0), ("moved_out", "", 4.7), ("closing", "", 104.6)]  # fmt: skip


def frame(kind="forecast", lines=LINES):
    rows = [("all", "2026-10", kind, "all_live", line, exit_, n) for line, exit_, n in lines]
    return pd.DataFrame(rows, columns=["segment", "period", "kind", "state", "line", "exit", "customers"])


def test_printed_parts_foot():
    # 100.4 -> 100, 104.6 -> 105: the parts 10.3 + 2.2 - 5.4 - 1.2 - 1.7 = 4.2 must print as 5.
    # Floors 10, 2, -6, -2, -2 = 2 leave 3 for the remainders .3 .2 .6 .8 .3: card, cancelled, then joined.
    (step,) = steps_of(frame())
    assert (step.opening, step.closing) == (100, 105)
    assert dict(step.parts) == {"joined": 11, "returned after leaving": 2, "left: cancelled": -5, "left: card": -1,
                                "away and back, net": -2}  # fmt: skip


def test_last_counted_and_first_projected_period_are_taken():
    steps = steps_of(made.rollforward(made.VEG_BOX))
    assert [(s.period, s.kind) for s in steps] == [("2026-10", "actual"), ("2026-11", "forecast")]
    assert steps[0].closing == steps[1].opening


def test_memo_lines_are_no_part_of_the_sum():
    memo = pd.DataFrame([("all", "2026-10", "forecast", "all_live", "joined_and_left", "cancelled", 9)],
                        columns=frame().columns)  # fmt: skip
    assert steps_of(pd.concat([frame(), memo]))[0] == steps_of(frame())[0]


def test_lines_that_do_not_occur_are_left_out():
    (step,) = steps_of(frame(lines=[("opening", "", 5), ("joined", "", 0), ("closing", "", 5)]))
    assert step.parts == (("joined", 0),)


def test_a_forecast_that_is_not_known_is_not_drawn():
    rows = made.rollforward(made.VEG_BOX)
    rows.loc[rows["kind"] == "forecast", "customers"] = float("nan")
    assert [s.kind for s in steps_of(rows)] == ["actual"]


def test_title_and_words():
    figure = rollforward_chart(made.rollforward(made.VEG_BOX))
    assert "2026-11 is projected to end at" in figure.alt and "opening" in figure.alt


def test_an_unknown_quantity_is_refused():
    with pytest.raises(CallError, match='The roll-forward has no known period of "wekly"; it has "taster"'):
        rollforward_chart(made.rollforward(made.VEG_BOX), quantity="wekly")
