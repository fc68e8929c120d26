"""k steps ahead: the distance, its reference, and the direction of the gaps."""

import numpy as np
import pytest

from cohortflow.assessment.ksteps import discrepancy, k_steps, power
from cohortflow.assessment.paths import Paths
from tests.adequacy_cases import STATES, tally_of, world


def run(tally, **more):
    return k_steps(tally.states, Paths.of(tally), replications=99, rng=np.random.default_rng(1), **more)


def test_distance_by_hand():
    # P = (.5 .5 / 0 1), P^2 row 0 = (.25, .75); 8 starts: 4 stay, 4 left: (4-2)^2/2 + (4-6)^2/6
    P = np.array([[0.5, 0.5], [0.0, 1.0]])
    assert discrepancy(np.array([[4, 4], [0, 0]]), P, 2) == pytest.approx(4 / 2 + 4 / 6)


def test_something_that_cannot_happen_is_infinitely_far():
    assert discrepancy(np.array([[1, 0], [1, 1]]), np.array([[0.5, 0.5], [0.0, 1.0]]), 1) == np.inf


def test_rows_without_data_stay_where_they_are():
    assert power(np.array([[np.nan, np.nan], [0.0, 1.0]]), 3).tolist() == [[1, 0], [0, 1]]


def test_one_chain_holds_and_differing_customers_do_not():
    findings, _ = run(world("markov", 800))
    assert [f.what for f in findings] == ["k=3", "k=6"]
    assert min(f.p_value for f in findings) > 0.05
    findings, gaps = run(world("two types", 2000))
    assert findings[-1].p_value == 0.01
    # differing customers: those in R still there after 6 periods are more than one chain says
    stay = gaps[(gaps["k"] == 6) & (gaps["from"] == "R") & (gaps["to"] == "R")]
    assert stay["gap"].iloc[0] > 0.01


def test_gaps_are_observed_less_expected_and_rows_add_to_nothing():
    _, gaps = run(world("markov", 500))
    assert (gaps["gap"] == gaps["observed"] - gaps["expected"]).all()
    assert gaps.groupby(["k", "from"])["gap"].sum().abs().max() < 1e-12
    assert set(gaps["from"]) == set(STATES.remaining)


def test_longest_horizon_may_be_named():
    findings, _ = run(world("markov", 200), longest=3)
    assert [f.what for f in findings] == ["k=3"]


def test_short_histories_and_bare_counts_cannot_tell():
    findings, gaps = run(tally_of(["0000", "0002"]))
    assert ([f.reason for f in findings], len(gaps)) == (["longer_history"], 0)
    findings, _ = k_steps(STATES, None, replications=19, rng=np.random.default_rng(1))
    assert findings[0].reason == "customer_rows"
