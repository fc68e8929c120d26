"""Fiscal quarters and years of a roll-forward, by hand."""

from datetime import date, timedelta
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.periods import Calendar
from cohortflow.projector.subtotals import COLUMNS, subtotals

MONTHS = Calendar("month", fiscal_year_start=4)


def frame(
    first: str, flows: list[tuple[float, float]], *, counted: int, calendar: Calendar = MONTHS, opening=100
):
    """One state: joined and lost of each period; the first `counted` of them are actual."""
    rows, at = [], opening
    for k, (joined, lost) in enumerate(flows):
        period = calendar.label(calendar.parse(first) + k)
        kind = "actual" if k < counted else "forecast"
        for line, leaving, n in (
            ("opening", "", at),
            ("joined", "", joined),
            ("lost", "gone", lost),
            ("closing", "", at + joined - lost),
        ):
            rows.append(("all", period, kind, "here", line, leaving, n))
        at += joined - lost
    return pd.DataFrame(rows, columns=["segment", "period", "kind", "state", "line", "exit", "customers"])


def lines(table: pd.DataFrame, period: str) -> dict[str, float]:
    return dict(table[table["period"] == period][["line", "customers"]].values.tolist())


def test_quarters_and_year_by_hand():
    # April to June: 100 + (5 + 6 + 7) - (1 + 2 + 3) = 112; July to September: 112 + 12 - 6 = 118
    made = subtotals(frame("2026-04", [(5, 1), (6, 2), (7, 3), (4, 2), (4, 2), (4, 2)], counted=3), MONTHS)
    assert list(made.columns) == COLUMNS
    assert lines(made, "2026/27 Q1") == {"opening": 100, "joined": 18, "lost": 6, "closing": 112}
    assert lines(made, "2026/27 Q2") == {"opening": 112, "joined": 12, "lost": 6, "closing": 118}
    assert lines(made, "2026/27") == {"opening": 100, "joined": 30, "lost": 12, "closing": 118}
    about = made.drop_duplicates("period").set_index("period")
    assert about["kind"].to_dict() == {"2026/27 Q1": "actual", "2026/27 Q2": "forecast", "2026/27": "both"}
    assert about["complete"].to_dict() == {"2026/27 Q1": True, "2026/27 Q2": True, "2026/27": False}
    assert about.loc["2026/27", ["first", "last"]].tolist() == ["2026-04", "2026-09"]


def test_counted_quarters_are_whole_numbers():
    made = subtotals(frame("2026-04", [(5, 1), (6, 2), (7, 3)], counted=3), MONTHS)
    assert all(float(n).is_integer() for n in made["customers"])


def test_a_quarter_that_is_not_whole_says_so():
    made = subtotals(frame("2026-05", [(5, 1), (6, 2), (7, 3)], counted=3), MONTHS)
    about = made.drop_duplicates("period").set_index("period")["complete"]
    assert not about.any()


def test_a_figure_that_is_not_known_makes_its_sum_unknown():
    rows = frame("2026-04", [(5, 1), (6, 2), (7, 3)], counted=0).astype({"customers": float})
    rows.loc[(rows["period"] == "2026-05") & (rows["line"] == "lost"), "customers"] = np.nan
    made = lines(subtotals(rows, MONTHS), "2026/27 Q1")
    assert np.isnan(made["lost"]) and made["joined"] == 18


def test_quarters_have_years_only_and_years_and_steps_have_nothing():
    quarters = Calendar("quarter", fiscal_year_start=4)
    made = subtotals(frame("2026-Q2", [(5, 1)] * 4, counted=4, calendar=quarters), quarters)
    assert set(made["span"]) == {"year"} and made["complete"].all()
    for kind, first in (("year", "2026"), ("step", "3")):
        calendar = Calendar(kind)
        assert not len(subtotals(frame(first, [(5, 1)] * 3, counted=3, calendar=calendar), calendar))


def test_an_own_calendar_vouches_only_for_spans_with_neighbours():
    firsts = [date(2026, month, 1) for month in range(1, 9)]
    own = tuple((f"P{k + 1}", a, b - timedelta(days=1)) for k, (a, b) in enumerate(pairwise(firsts)))
    calendar = Calendar("own", own=own)
    made = subtotals(frame("P1", [(1, 1)] * 7, counted=7, calendar=calendar), calendar)
    quarters = made[made["span"] == "quarter"].drop_duplicates("period").set_index("period")["complete"]
    assert quarters.to_dict() == {"2026 Q1": False, "2026 Q2": True, "2026 Q3": False}


@given(
    st.lists(st.tuples(st.integers(0, 50), st.integers(0, 9)), min_size=1, max_size=40), st.integers(0, 40)
)
def test_every_span_foots(flows, counted):
    made = subtotals(frame("2025-11", flows, counted=counted), MONTHS)
    for _, rows in made.groupby(["span", "period"]):
        own = rows.set_index("line")["customers"]
        assert own["opening"] + own["joined"] - own["lost"] == pytest.approx(own["closing"], abs=1e-9)
    for span in ("quarter", "year"):
        whole = made[(made["span"] == span) & (made["line"] == "joined")]["customers"].sum()
        assert whole == sum(joined for joined, _ in flows)
