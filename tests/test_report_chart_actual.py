"""Forecast, band and counts as a drawing."""

import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.actual import actual_chart, has_outcome
from cohortflow.report.chart.style import NARROW, WIDE
from tests.report_layout import clipped, overlapping


def frame(periods: int = 3) -> pd.DataFrame:
    rows = [("q2", f"2026-{h:02d}", h, "all_live", 100.0 + h, 95.0, 106.0, 0.9, 100.0 if h != 2 else 120.0, h != 2)
            for h in range(1, periods + 1)]  # fmt: skip
    return pd.DataFrame(
        [("q1", *rows[0][1:]), *rows],
        columns=[
            "run",
            "period",
            "periods_ahead",
            "quantity",
            "forecast",
            "low",
            "high",
            "level",
            "actual",
            "inside",
        ],
    )


@pytest.mark.parametrize("width", [WIDE, NARROW])
@pytest.mark.parametrize("periods", [1, 3, 12])
def test_no_text_is_clipped_or_covered(width, periods):
    figure = actual_chart(frame(periods), width=width)
    assert clipped(figure) == [] and overlapping(figure) == []


def test_title_and_words_say_how_the_band_did():
    figure = actual_chart(frame())
    assert "Live customers: 2 of 3 counts lie inside the band of the forecast" in figure.alt
    assert "2026-02 forecast 102 (95 to 106), counted 120" in figure.alt
    assert "1 of 1 counts" in actual_chart(frame(), run="q1").alt


def test_a_count_outside_is_marked_by_shape_too():
    axes = actual_chart(frame()).axes[0]
    assert [line.get_marker() for line in axes.get_lines() if line.get_marker() != "None"] == ["o", "x", "o"]


def test_what_is_not_there_is_refused():
    with pytest.raises(CallError, match='No forecast of "quiet" has been caught up with'):
        actual_chart(frame(), quantity="quiet")
    with pytest.raises(CallError, match='The table has no run "q9"; it has "q1", "q2"'):
        actual_chart(frame(), run="q9")
    assert has_outcome(frame()) and not has_outcome(frame(), "quiet")
