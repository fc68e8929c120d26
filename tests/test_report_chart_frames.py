"""What charts take."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.frames import clear_winner, frame_of, square, states_of, transitions_of
from tests import report_fixtures as made


def test_a_frame_without_the_columns_is_refused():
    with pytest.raises(CallError, match='The table lacks "value"; it has "state"'):
        frame_of(pd.DataFrame({"state": ["a"]}), ["state", "value"])


def test_neither_record_nor_frame_is_refused():
    with pytest.raises(CallError, match="Expected a record or a DataFrame to draw; got list"):
        frame_of([1], ["x"])


def test_segments_are_cut_and_unknown_ones_refused():
    frame = pd.DataFrame({"segment": ["shop", "web"], "x": [1, 2]})
    assert frame_of(frame, ["x"], segment="web")["x"].tolist() == [2]
    with pytest.raises(
        CallError, match=r'There is no segment "webb" \(did you mean "web"\?\); there are "shop", "web"'
    ):
        frame_of(frame, ["x"], segment="webb")


def test_a_single_segment_needs_no_name():
    assert len(frame_of(pd.DataFrame({"segment": ["web"], "x": [1]}), ["x"])) == 1


def test_a_fit_is_asked_for_its_intervals_at_the_level():
    class Fit:
        def interval(self, level=0.95):
            return made.transitions(made.SMALL).assign(level=level)

    assert set(transitions_of(Fit(), level=0.8)["level"]) == {0.8}
    assert set(transitions_of(Fit())["level"]) == {0.95}


def test_states_are_read_off_the_moves_when_not_given():
    frame = made.transitions(made.SMALL)
    assert states_of(frame, None, frame).exits == ("left",)
    assert states_of(frame, made.SMALL, frame) is made.SMALL


def test_square_orders_rows_and_columns():
    frame = pd.DataFrame({"from": ["a", "b"], "to": ["b", "a"], "p": [0.3, 0.7]})
    assert np.array_equal(square(frame, "p", ["b", "a"]), [[np.nan, 0.7], [0.3, np.nan]], equal_nan=True)


def test_the_largest_wins_only_when_its_interval_is_above_all_others():
    nan = float("nan")
    assert clear_winner(np.array([0.3, nan]), np.array([nan, nan]), np.array([nan, nan])) == 0
    assert clear_winner(np.array([nan, nan]), np.array([nan, nan]), np.array([nan, nan])) is None
    # .30 (.26 to .34) against .20 (.10 to .27): the intervals touch, so nothing is said
    assert clear_winner(np.array([0.3, 0.2]), np.array([0.26, 0.1]), np.array([0.34, 0.27])) is None
