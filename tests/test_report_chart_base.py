"""The base over time."""

import pytest

from cohortflow.report.chart.base import base_chart
from tests import report_fixtures as made

S = made.VEG_BOX


def title(figure):
    return " ".join(t.get_text() for t in figure.texts)


def test_a_change_is_claimed_only_when_the_band_leaves_today_out():
    rows = made.projection(S)
    live, last = rows["state"] == "all_live", rows["periods_ahead"] == 8
    today = rows.loc[live & (rows["periods_ahead"] == 0), "customers"].iloc[0]
    rows.loc[live & last, ["customers", "low", "high"]] = [today * 1.2, today * 1.1, today * 1.3]
    assert "Live customers grow from" in title(base_chart(rows)) and "+20.0% in 8 months" in title(
        base_chart(rows)
    )
    rows.loc[live & last, ["customers", "low", "high"]] = [today * 0.8, today * 0.7, today * 0.9]
    assert "Live customers shrink from" in title(base_chart(rows))
    rows.loc[live & last, ["customers", "low", "high"]] = [today * 1.2, today * 0.9, today * 1.5]
    assert "the band does not say whether that is more or less than today" in title(base_chart(rows))


def test_past_and_projection_meet():
    figure = base_chart(made.projection(S), made.rollforward(S), states=S)
    past, ahead = figure.axes[0].lines[0], figure.axes[0].lines[1]
    assert past.get_xdata()[-1] == ahead.get_xdata()[0]
    assert past.get_ydata()[-1] == pytest.approx(ahead.get_ydata()[0])
    assert len(past.get_xdata()) == 24 and len(ahead.get_xdata()) == 9


def test_live_customers_totals_and_states_have_panels_exits_have_none():
    rows = made.projection(S)
    names = [a.texts[0].get_text() for a in base_chart(rows, states=S).axes]
    figure = base_chart(rows, made.rollforward(S), states=S)
    assert len(figure.axes) == 1 + len(S.remaining) == len(names)
    assert "cancelled" not in figure.alt


def test_every_panel_begins_at_zero():
    assert all(
        a.get_ylim()[0] == 0 for a in base_chart(made.projection(S), made.rollforward(S), states=S).axes
    )


def test_periods_before_the_base_was_whole_are_left_out():
    past = made.rollforward(S)
    late = past[(past["state"] == "all_live") & (past["line"] == "joined")].assign(
        line="unobserved_in", customers=0.0
    )
    late.loc[late["period"] == "2025-01", "customers"] = 3000.0  # most of the base turned up in January
    import pandas as pd

    figure = base_chart(made.projection(S), pd.concat([past, late]), states=S)
    assert len(figure.axes[0].lines[0].get_xdata()) == 22  # 2025-01 to 2026-10, of 24 from 2024-11 on


def test_totals_are_summed_over_the_past():
    import pandas as pd

    rows = made.projection(S)
    boxes = rows[rows["state"].isin(["weekly", "fortnightly"])]
    both = boxes.groupby(["segment", "period", "periods_ahead"], as_index=False).sum(numeric_only=True)
    rows = pd.concat([rows, both.assign(state="boxes", level=0.9)])
    totals = {"boxes": ("weekly", "fortnightly")}
    figure = base_chart(rows, made.rollforward(S), totals=totals, states=S)
    past, ahead = figure.axes[1].lines[:2]
    assert past.get_ydata()[-1] == pytest.approx(ahead.get_ydata()[0])
