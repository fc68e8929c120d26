"""The heat map of moves: what it says, and what it does not."""

import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.moves import moves_chart
from tests import report_fixtures as made


def rows(*cells):
    """(from, to, count, at_risk, rate, low, high)"""
    return pd.DataFrame(
        [("all", *c, 0.9, "wilson", "") for c in cells],
        columns=[
            "segment",
            "from",
            "to",
            "count",
            "at_risk",
            "probability",
            "low",
            "high",
            "level",
            "method",
            "note",
        ],
    )


TWO = rows(
    ("a", "a", 60, 100, 0.6, 0.52, 0.68), ("a", "gone", 40, 100, 0.4, 0.32, 0.48),
    ("b", "a", 5, 100, 0.05, 0.02, 0.1), ("b", "b", 95, 100, 0.95, 0.9, 0.98), ("b", "gone", 0, 100, 0.0, 0.0, 0.026),
    ("a", "b", 0, 100, 0.0, 0.0, 0.0),
)  # fmt: skip


def texts(figure):
    return [t.get_text() for axes in figure.axes for t in axes.texts] + [t.get_text() for t in figure.texts]


def test_the_title_names_the_likeliest_move_with_rate_and_interval():
    figure = moves_chart(TWO)
    title = " ".join(t.get_text() for t in figure.texts)
    assert "The most likely move is from a to gone, 40.0% (32.0 to 48.0%) a month" in title


def test_the_title_claims_nothing_when_intervals_meet():
    close = TWO.copy()
    close.loc[close["from"].eq("b") & close["to"].eq("a"), ["probability", "low", "high"]] = [0.3, 0.25, 0.35]
    assert "No single move stands out" in " ".join(t.get_text() for t in moves_chart(close).texts)


def test_cells_carry_rate_interval_and_count():
    said = texts(moves_chart(TWO))
    assert {"40.0%", "32.0%–48.0%", "n 40"} <= {t.replace("32.0–48.0%", "32.0%–48.0%") for t in said}


def test_a_move_never_seen_shows_its_upper_limit_and_an_impossible_one_a_dash():
    said = texts(moves_chart(TWO))
    assert "none" in said and "up to 2.6%" in said and "–" in said and "0%" not in said[: said.index("none")]


def test_a_state_without_data_says_so():
    empty = rows(("a", "a", 10, 10, 1.0, 0.8, 1.0), ("a", "b", 0, 10, 0.0, 0.0, 0.2), ("b", "a", 0, 0, None, 0.0, 1.0),
                 ("b", "b", 0, 0, None, 0.0, 1.0))  # fmt: skip
    from cohortflow import States

    assert texts(moves_chart(empty, states=States(["a", "b"]))).count("no data") == 2


def test_many_states_make_a_wider_chart():
    wide = moves_chart(made.transitions(made.FIFTEEN), states=made.FIFTEEN)
    assert (
        wide.get_size_inches()[0]
        > moves_chart(made.transitions(made.SMALL), states=made.SMALL).get_size_inches()[0]
    )


def test_a_frame_that_is_not_of_transitions_is_refused():
    with pytest.raises(CallError, match='The table lacks "from", "to"'):
        moves_chart(made.retention())
