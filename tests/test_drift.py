"""Drift: all periods, eras, seasons."""

import numpy as np
import pytest

from cohortflow.assessment.drift import eras, eras_alike, periods_alike, seasons_alike
from cohortflow.assessment.tables import independence
from tests.adequacy_cases import tally_of, two_states, world

DRAWN = {"replications": 99}


def rng():
    return np.random.default_rng(2)


def test_all_periods_by_hand():
    # state 0: period 0: 3 stay, 1 leaves; period 1: 1 stays, 2 leave
    found = periods_alike(tally_of(["000", "002", "002", "02."]), **DRAWN, rng=rng())
    assert (found.statistic, found.df) == (pytest.approx(independence([[3, 1], [1, 2]]).lr), 1)


def test_one_period_cannot_differ():
    assert periods_alike(tally_of(["00", "02"]), **DRAWN, rng=rng()).reason == "longer_history"
    found = periods_alike(tally_of(["000", "000"]), **DRAWN, rng=rng())
    assert found.reason == "too_few_moves"  # one destination only


def test_shared_shocks_make_periods_differ_but_not_eras():
    tally = world("shocks", 2000, periods=25)
    assert periods_alike(tally, **DRAWN, rng=rng()).p_value == 0.01
    assert eras_alike(tally, **DRAWN, rng=rng()).p_value > 0.05


def test_a_shift_half_way_is_an_era():
    tally = two_states([0.05] * 15 + [0.12] * 15, 3000, 31, rng())
    assert eras_alike(tally, **DRAWN, rng=rng()).p_value <= 0.02


def test_eras_need_eight_periods():
    assert eras_alike(two_states(0.1, 50, 8, rng()), **DRAWN, rng=rng()).reason == "longer_history"


@pytest.mark.parametrize(
    "periods, cycle, number", [(35, 12, 3), (24, 12, 2), (11, 1, 2), (35, 1, 3), (10, 12, 2)]
)
def test_eras_are_runs_of_neighbours_and_blocks_lie_within_them(periods, cycle, number):
    block, era = eras(periods, cycle)
    assert set(np.diff(block)) <= {0, 1} and block[0] == 0
    assert era.tolist() == sorted(era) and len(set(era)) == number
    sizes = np.bincount(era[block])
    assert sizes.max() - sizes.min() <= 1  # of one length, give or take one period
    assert np.bincount(block).max() <= max(1, round(periods / 12))


def test_seasons():
    # leaving is twice as likely in the first quarter of each year
    rates = np.where(np.arange(36) % 12 < 3, 0.08, 0.03)
    seasonal = two_states(rates, 3000, 37, rng(), calendar="month", first=600)
    assert seasons_alike(seasonal, **DRAWN, rng=rng()).p_value == 0.01
    flat = two_states(0.05, 3000, 37, rng(), calendar="month", first=600)
    assert seasons_alike(flat, **DRAWN, rng=rng()).p_value > 0.05


def test_shared_luck_is_not_a_season():
    luck = 0.05 * np.exp(np.random.default_rng(6).normal(0, 0.4, 36))
    tally = two_states(luck, 3000, 37, rng(), calendar="month", first=600)
    assert seasons_alike(tally, **DRAWN, rng=rng()).p_value > 0.05


def test_seasons_need_a_calendar_and_two_years():
    assert seasons_alike(two_states(0.1, 50, 30, rng()), **DRAWN, rng=rng()).reason == "no_calendar"
    short = two_states(0.1, 50, 20, rng(), calendar="month", first=600)
    assert seasons_alike(short, **DRAWN, rng=rng()).reason == "two_cycles"
