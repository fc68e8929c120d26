"""The approach to the settled mix."""

import numpy as np
import pytest

import cohortflow as cf
from cohortflow.report.ahead import LONGEST, SHORTEST, approach

STATES = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
CHAIN = cf.Chain(STATES, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])


def test_shares_of_those_who_have_not_left():
    # 100 fresh, 50 join each period: fresh 50, 50; steady 80, 112: shares 50/130, 50/162
    rows = approach(CHAIN, [100, 0, 0], STATES, joining=[50, 0, 0], periods=2)
    fresh = rows[rows["state"] == "fresh"]["share"].tolist()
    assert fresh == pytest.approx([1.0, 50 / 130, 50 / 162])
    assert rows.groupby("periods_ahead")["share"].sum().tolist() == pytest.approx([1, 1, 1])
    assert set(rows["state"]) == {"fresh", "steady"}


def test_it_goes_on_until_the_mix_stands_still():
    slow = cf.Chain(cf.States(["a", "b"]), [[0.97, 0.03], [0.02, 0.98]])
    ahead = approach(slow, [1, 0], slow.states)["periods_ahead"].max()
    # |second eigenvalue| .95: .6 x .95^t <= .01 at t = 80; half as much again is drawn
    assert 110 <= ahead <= 130 <= LONGEST


def test_a_mix_that_stands_still_is_still_drawn_for_a_while():
    still = cf.Chain(cf.States(["a"]), [[1.0]])
    assert approach(still, [5], still.states)["periods_ahead"].max() == SHORTEST


def test_nobody_left_has_no_shares():
    rows = approach(cf.Chain(STATES, [[0, 0, 1], [0, 0, 1], [0, 0, 1]]), [10, 0, 0], STATES, periods=1)
    assert np.isnan(rows[rows["periods_ahead"] == 1]["share"]).all()
