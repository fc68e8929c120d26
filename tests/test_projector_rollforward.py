"""The roll-forward of what was counted: every line on paper, returns, gaps, memos; it always closes."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.projector.joiners import planned_numbers
from cohortflow.projector.mix import walk
from cohortflow.projector.rollforward import counted_lines, forecast_lines, rollforward_actual
from tests.projector_cases import CHAIN, STATES, tally_of_stays

STAYS = [
    ("joined", "", [(1, "fresh"), (2, "steady"), (3, "steady"), (4, "paused"), (5, "steady"), (6, "steady")]),
    ("joined", "", [(2, "fresh"), (3, "left")]),
    ("returned", "left", [(5, "steady"), (6, "lapsed")]),
    ("unknown", "", [(3, "steady"), (4, "steady")]),  # vanishes after period 4
    ("joined", "", [(2, "fresh"), (4, "steady"), (5, "steady"), (6, "steady")]),  # no row in period 3
]


def lines(state, period):
    frame = rollforward_actual(tally_of_stays(STAYS, memos=[(3, 0, "left", 2)]))
    rows = frame[(frame["state"] == state) & (frame["period"] == period) & (frame["customers"] != 0)]
    return {(r.line, r.exit): r.customers for r in rows.itertuples()}


def test_every_line_on_paper():
    # period 2: one fresh moves on to steady, two join as fresh
    assert lines("fresh", "2") == {
        ("opening", ""): 1, ("joined", ""): 2, ("moved_out", ""): 1, ("closing", ""): 2
    }  # fmt: skip
    # period 3: one of two fresh leaves, the other has no row; a history from before the log comes in sight
    assert lines("fresh", "3") == {("opening", ""): 2, ("lost", "left"): 1, ("unobserved_out", ""): 1}
    assert lines("steady", "3") == {("opening", ""): 1, ("unobserved_in", ""): 1, ("closing", ""): 2}
    # period 4: one pauses, one comes back into sight after the gap
    assert lines("steady", "4") == {
        ("opening", ""): 2, ("unobserved_in", ""): 1, ("moved_out", ""): 1, ("closing", ""): 2
    }  # fmt: skip
    # period 5: back from the pause, one returns, one is not seen any more
    assert lines("steady", "5") == {
        ("opening", ""): 2, ("returned", ""): 1, ("moved_in", ""): 1, ("unobserved_out", ""): 1,
        ("closing", ""): 3,
    }  # fmt: skip
    assert lines("steady", "6") == {("opening", ""): 3, ("lost", "lapsed"): 1, ("closing", ""): 2}
    # all_live: the pause is a move out of the live states
    assert lines("all_live", "4") == {
        ("opening", ""): 2, ("unobserved_in", ""): 1, ("moved_out", ""): 1, ("closing", ""): 2
    }  # fmt: skip


def test_the_memo_stands_beside_the_sum():
    assert lines("all_live", "3")[("joined_and_left", "left")] == 2
    frame = rollforward_actual(tally_of_stays(STAYS))
    assert "joined_and_left" not in set(frame["line"]) and frame["customers"].dtype.kind == "i"
    assert frame["kind"].unique().tolist() == ["actual"] and frame["period"].iloc[0] == "2"


stays_drawn = st.lists(
    st.tuples(
        st.sampled_from(["joined", "returned", "unknown"]),
        st.integers(1, 6),
        st.lists(st.sampled_from(["fresh", "steady", "paused", None]), min_size=1, max_size=5),
        st.sampled_from(["left", "lapsed", ""]),
    ),
    min_size=1,
    max_size=12,
)


@settings(max_examples=30, deadline=None)
@given(stays_drawn)
def test_it_closes_in_whole_customers_whatever_happens(drawn):
    stays = []
    for kind, begin, states, leaves in drawn:
        names = ["fresh", *states][: 7 - begin]
        rows = [(begin + k, name) for k, name in enumerate(names) if name is not None]
        if leaves and rows[-1][0] < 6:
            rows.append((rows[-1][0] + 1, leaves))
        stays.append((kind, "left" if kind == "returned" else "", rows))
    found = counted_lines(tally_of_stays(stays))
    live = ~STATES.exit_mask
    stay = np.einsum("tkk->tk", found.flows)
    closing = found.opening + sum(found.inflow.values()) - sum(found.outflow.values())
    closing = closing - (found.flows.sum(axis=2) - stay) + (found.flows.sum(axis=1) - stay)
    assert np.array_equal(closing[:, live], found.closing[:, live])


def test_forecast_lines_by_hand():
    plan = planned_numbers(STATES, {"fresh": 10}, returned={"steady": 1}, periods=1)
    found = walk(CHAIN.schedule, {"steady": 100}, 1, plan.expected())
    frame = forecast_lines(STATES, found, plan, ["2026-10"])
    steady = frame[frame["state"] == "steady"].set_index(["line", "exit"])["customers"]
    assert steady.to_dict() == pytest.approx(
        {("opening", ""): 100, ("joined", ""): 0, ("returned", ""): 1, ("lost", "left"): 10,
         ("lost", "lapsed"): 0, ("moved_in", ""): 0, ("moved_out", ""): 10, ("closing", ""): 81}
    )  # fmt: skip
    assert list(frame.columns) == ["segment", "period", "kind", "state", "line", "exit", "customers"]
