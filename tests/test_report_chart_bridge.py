"""The bridge as a drawing."""

import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.bridge import bridge_chart, bridge_steps
from cohortflow.report.chart.style import NARROW, WIDE
from tests.report_layout import clipped, overlapping

AMOUNTS = [("last_forecast", 100.4), ("data_restated", 0.0), ("opening_mix", 5.4), ("segment_mix", -0.6),
           ("joiners", 2.3), ("rates", -3.6), ("model", 0.0), ("value", 0.0), ("adjustments", 1.4),
           ("this_forecast", 105.3)]  # fmt: skip


def frame(scale: float = 1.0) -> pd.DataFrame:
    rows = [("all_live", "2026-12", part, scale * n) for part, n in AMOUNTS]
    rows += [("contribution", "2026-12", part, 90 * scale * n) for part, n in AMOUNTS]
    return pd.DataFrame(rows, columns=["quantity", "period", "part", "amount"])


def test_printed_parts_foot():
    # 100.4 -> 100, 105.3 -> 105. Floors 0, 5, -1, 2, -4, 0, 0, 1 = 3; the two missing go to the largest
    # remainders: .4 of the opening, .4 of the segments' -0.6, of the rates' -3.6 and of 1.4; first come first.
    last, parts, this, period = bridge_steps(frame())
    assert (last, this, period) == (100, 105, "2026-12") and sum(n for _, n in parts) == 5
    assert dict(parts)["joiners"] == 2 and dict(parts)["model"] == 0
    assert all(abs(n - dict(AMOUNTS)[name]) < 1 for name, n in parts)


@pytest.mark.parametrize("width", [WIDE, NARROW])
@pytest.mark.parametrize("scale", [1.0, -1.0, 1234.5])
def test_no_text_is_clipped_or_covered(width, scale):
    figure = bridge_chart(frame(scale), width=width)
    assert clipped(figure) == [] and overlapping(figure) == []


def test_title_and_words_say_what_changed():
    figure = bridge_chart(frame())
    assert "Live customers at the end of 2026-12: 105, 5 more than the last forecast" in figure.alt
    assert "prices and values 0" in figure.alt
    assert bridge_chart(frame(), quantity="contribution").alt.startswith("Bars from the last forecast")
    assert "Contribution of 2026-12" in bridge_chart(frame(), quantity="contribution").alt
    same = frame()
    same["amount"] = [7.0 if "forecast" in part else 0.0 for part in same["part"]]
    assert "7, as in the last forecast" in bridge_chart(same).alt


def test_what_is_not_there_is_refused():
    with pytest.raises(CallError, match='The bridge has no "weekly"; it has "all_live", "contribution"'):
        bridge_chart(frame(), quantity="weekly")
    with pytest.raises(CallError, match='The bridge has no period "2027-01"; it has "2026-12"'):
        bridge_chart(frame(), period="2027-01")
