"""The approach to the settled mix."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.settling import settled, settling_chart
from tests import report_fixtures as made


def goal(measure="settled_mix", a=0.6, low=0.5, high=0.7, origin="", note=""):
    rows = [
        ("all", measure, "a", origin, a, low, high, note),
        ("all", measure, "b", origin, 1 - a, 1 - high, 1 - low, note),
    ]
    return pd.DataFrame(rows, columns=["segment", "measure", "state", "from", "value", "low", "high", "note"])


def walk(*shares):
    rows = [(h, s, p if s == "a" else 1 - p) for h, p in enumerate(shares) for s in ("a", "b")]
    return pd.DataFrame(rows, columns=["periods_ahead", "state", "share"])


def title(figure):
    return " ".join(t.get_text() for t in figure.texts)


def test_the_periods_to_settle_are_those_after_which_the_mix_stays_within_a_point():
    # distances from .6: .3 .1 .02 .005 .0: within .01 from period 3 on
    assert settled(goal(), walk(0.9, 0.7, 0.62, 0.605, 0.6)).periods == 3.0
    assert settled(goal(), walk(0.6, 0.7, 0.6)).periods == 2.0  # it left again
    assert settled(goal(), walk(0.6, 0.6)).periods == 0.0
    assert np.isnan(settled(goal(), walk(0.9, 0.8)).periods)


def test_the_title_says_where_from_where_to_and_how_long():
    assert "a has farthest to go: from 90.0% today to 60.0%; settling takes 3 months" in title(
        settling_chart(walk(0.9, 0.7, 0.62, 0.605), goal())
    )
    assert "settling takes more than 1 month" in title(settling_chart(walk(0.9, 0.8), goal()))


def test_nothing_is_said_to_move_when_all_is_within_the_intervals():
    assert "Every share is already within the interval" in title(
        settling_chart(walk(0.65, 0.61, 0.6), goal())
    )


def test_without_groups_the_limit_is_all_exit_and_those_remaining_are_shown():
    both = pd.concat([goal("limit_from_start", a=0.0, origin="start"), goal("remaining_mix")])
    assert settled(both).measure == "remaining_mix"


def test_seasons_are_averaged_without_an_interval():
    both = pd.concat([goal(a=0.5, note="position:1"), goal(a=0.7, note="position:2")])
    found = settled(both)
    assert found.rows["value"].tolist() == pytest.approx([0.6, 0.4]) and found.rows["low"].isna().all()


def test_no_mix_to_settle_at_is_refused():
    nothing = goal(a=np.nan)
    with pytest.raises(CallError, match="There is no settled mix to draw"):
        settling_chart(walk(0.9, 0.8), nothing)


def test_the_upright_line_stands_where_it_settles():
    figure = settling_chart(walk(0.9, 0.7, 0.62, 0.605), goal())
    assert any(list(line.get_xdata()) == [3.0, 3.0] for line in figure.axes[0].lines)
    assert (
        "Line charts over 40 periods ahead"
        in settling_chart(made.approach(made.VEG_BOX), made.long_run(made.VEG_BOX)).alt
    )
