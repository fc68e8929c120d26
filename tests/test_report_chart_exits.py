"""Time until leaving and ways of leaving."""

import numpy as np
import pandas as pd

from cohortflow.report.chart.exits import exit_reason_chart, exit_time_chart
from tests import report_fixtures as made


def times(*cells):
    rows = [("all", s, m, "", v, lo, hi) for s, m, v, lo, hi in cells]
    return pd.DataFrame(rows, columns=["segment", "from", "measure", "exit", "value", "low", "high"])


def ways(*cells):
    rows = [("all", s, "probability", e, v, lo, hi) for s, e, v, lo, hi in cells]
    return pd.DataFrame(rows, columns=["segment", "from", "measure", "exit", "value", "low", "high"])


def title(figure):
    return " ".join(t.get_text() for t in figure.texts)


def test_the_soonest_state_is_named_only_when_its_interval_is_clear():
    clear = times(("a", "mean_time", 5, 4, 6), ("b", "mean_time", 9, 8, 10))
    assert "Customers in a leave soonest: after 5.0 months (4.0 to 6.0) on average" in title(
        exit_time_chart(clear)
    )
    close = times(("a", "mean_time", 7, 4, 9), ("b", "mean_time", 9, 8, 10))
    assert "the intervals do not single out one state" in title(exit_time_chart(close))


def test_time_without_end_is_said_in_words():
    endless = times(("a", "mean_time", np.inf, np.nan, np.nan))
    figure = exit_time_chart(endless)
    assert "is not finite: some customers would never leave" in title(figure) and "never" in figure.alt


def test_unknown_times_are_not_drawn_as_zero():
    figure = exit_time_chart(times(("a", "mean_time", np.nan, np.nan, np.nan), ("b", "mean_time", 3, 2, 4)))
    assert "from a not known on average" in figure.alt


def test_one_exit_needs_no_finding():
    assert "the only exit there is" in title(exit_reason_chart(ways(("a", "left", 1.0, 1.0, 1.0))))


def test_the_likeliest_exit_is_claimed_for_every_state_or_said_to_differ():
    same = ways(
        ("a", "x", 0.8, 0.7, 0.9),
        ("a", "y", 0.2, 0.1, 0.3),
        ("b", "x", 0.7, 0.6, 0.8),
        ("b", "y", 0.3, 0.2, 0.4),
    )
    assert "From every state most leave by x: 70.0 to 80.0%" in title(exit_reason_chart(same))
    differ = same.assign(value=[0.8, 0.2, 0.3, 0.7], low=[0.7, 0.1, 0.2, 0.6], high=[0.9, 0.3, 0.4, 0.8])
    assert "it differs by state" in title(exit_reason_chart(differ))
    open_ = same.assign(low=0.0, high=1.0)
    assert "The intervals do not say which exit is the likeliest" in title(exit_reason_chart(open_))


def test_every_state_and_exit_is_in_the_text_alternative():
    figure = exit_reason_chart(made.exits(made.VEG_BOX))
    assert all(f"{s} by {e}" in figure.alt for s in made.VEG_BOX.remaining for e in made.VEG_BOX.exits)
