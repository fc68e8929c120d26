"""Tenure and time in state."""

import numpy as np
import pytest

from cohortflow.assessment.duration import bands, duration
from cohortflow.assessment.tables import independence
from cohortflow.states import States
from tests.adequacy_cases import tally_of, world
from tests.bench.worlds import panel_tally


def test_bands():
    # 0, 1, 2, 3-5, 6-11, 12-23, 24+
    assert bands(np.array([0, 1, 2, 3, 5, 6, 11, 12, 23, 24, 99])).tolist() == [
        0,
        1,
        2,
        3,
        3,
        4,
        4,
        5,
        5,
        6,
        6,
    ]


def test_statistic_by_hand():
    # joined in period 1 (tenure known): "..0 ..." four of age 0: two go on to 0, two to 1; then one each
    lines = [".00", ".00", ".01", ".01", "..0"]
    found = duration(tally_of(lines), "tenure", replications=19, rng=np.random.default_rng(1))
    assert found.reason == "too_few_moves"  # one band of tenure only
    lines = [".000", ".001", ".01.", ".01."]
    found = duration(tally_of(lines), "tenure", replications=19, rng=np.random.default_rng(1))
    table = [[2, 2], [1, 1]]  # tenure 0: 0 twice, 1 twice; tenure 1: 0 once, 1 once
    assert (found.statistic, found.df) == (pytest.approx(independence(table).lr), 1)


def test_unknown_histories_are_left_out():
    found = duration(tally_of(["0000", "0011"]), "tenure", replications=19, rng=np.random.default_rng(1))
    assert found.reason == "too_few_moves"


@pytest.mark.parametrize("check", ["tenure", "time_in_state"])
def test_newcomers_who_leave_faster_are_seen(check):
    # hazard .3 in the first two periods, .05 later; entry spread over periods 1 to 7
    rng = np.random.default_rng(4)
    entry = rng.integers(1, 8, 800)
    grid = np.full((800, 12), -1)
    for c, first in enumerate(entry):
        for t in range(first, 12):
            grid[c, t] = 0
            if rng.random() < (0.3 if t - first < 2 else 0.05) and t + 1 < 12:
                grid[c, t + 1] = 1
                break
    tally = panel_tally(grid, States(["here", "gone"], exits=["gone"]))
    assert duration(tally, check, replications=99, rng=rng).p_value == 0.01


@pytest.mark.parametrize("check", ["tenure", "time_in_state"])
def test_one_chain_holds_even_when_months_share_luck(check):
    tally = world("shocks", 1500, periods=25)
    assert duration(tally, check, replications=99, rng=np.random.default_rng(1)).p_value > 0.05


def test_without_contexts_it_says_what_is_lacking():
    found = duration(tally_of(["001"], full=False), "tenure", replications=19, rng=np.random.default_rng(1))
    assert (found.check, found.repair, found.reason) == ("tenure", "tenure", "customer_rows")
