"""Exact mixes: hand arithmetic, published projections, laws, and what a row without data does."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain
from cohortflow.errors import CallError
from cohortflow.projector.mix import as_inflow, cohort_shares, filled, step_counts, walk
from cohortflow.states import States
from tests.projector_cases import CHAIN, STATES, P, banded, chains, seasonal, two_types


def test_share_projection_of_beasley():
    # Beasley, OR-Notes, "Markov processes": (.25, .75) -> (.3325, .6675) -> (.392725, .607275)  (VERIFIED)
    chain = Chain(States(["ours", "theirs"]), [[0.88, 0.12], [0.15, 0.85]])
    found = step_counts(chain, [0.25, 0.75], 2)
    np.testing.assert_allclose(found[1:], [[0.3325, 0.6675], [0.392725, 0.607275]], rtol=0, atol=1e-15)


def test_land_of_oz_after_three_steps():
    # Grinstead & Snell, Introduction to Probability, Table 11.1: after 3 steps from N (VERIFIED)
    oz = Chain(States(["rain", "nice", "snow"]), [[0.5, 0.25, 0.25], [0.5, 0, 0.5], [0.25, 0.25, 0.5]])
    assert step_counts(oz, [0, 1, 0], 3)[3].tolist() == [0.40625, 0.1875, 0.40625]


def test_base_with_joiners_by_hand():
    found = walk(CHAIN.schedule, {"steady": 100}, 2, [[10, 0, 0, 0, 0], [0, 0, 5, 0, 0]])
    # period 1: 80 stay, 10 pause, 10 leave, 10 join; period 2: steady 80 x .8 + 10 x .5 + 10 x .8 = 77,
    # paused 80 x .1 + 10 x .4 + 5 = 17, left 10 + 8 + .5 + 1.5 = 20, lapsed .5 + .5 = 1
    np.testing.assert_allclose(found.counts[1], [10, 80, 10, 10, 0])
    np.testing.assert_allclose(found.counts[2], [0, 77, 17, 20, 1])
    np.testing.assert_allclose(found.flows[1, 1], [0, 64, 8, 8, 0])
    assert found.inflow.sum() == 15 and not found.undefined.any()


def test_matrices_act_in_their_order_and_hold_or_come_round():
    one, two = P.copy(), P.copy()
    two[1] = [0, 0.5, 0.3, 0.2, 0]
    steady = np.eye(5)[1]
    cycle, held = seasonal([one, two]), seasonal([one, two], tail="hold")
    np.testing.assert_allclose(step_counts(cycle, steady, 3)[3], steady @ one @ two @ one)
    np.testing.assert_allclose(step_counts(held, steady, 3)[3], steady @ one @ two @ two)
    np.testing.assert_allclose(step_counts(cycle, steady, 1, first_step=-1)[1], steady @ two)


def test_two_kinds_of_customers_leave_at_different_speed():
    # methods of the trade: half at 2 %, half at 20 % a period keep .5 x .98^24 + .5 x .8^24 = 31 % (by hand)
    schedule, _ = two_types()
    kept = cohort_shares(schedule, [1, 0], 24)[24, 0]
    assert kept == pytest.approx(0.5 * 0.98**24 + 0.5 * 0.8**24, rel=1e-12) and round(kept, 2) == 0.31


def test_a_joiner_is_new_and_an_old_customer_is_not():
    schedule, _ = banded()
    assert cohort_shares(schedule, [1, 0], 1)[1].tolist() == pytest.approx([0.7, 0.3])
    # now in "live": a quarter new, three quarters old: .25 x .3 + .75 x .1 = .15 leave
    assert cohort_shares(schedule, [1, 0], 1, joining=False)[1].tolist() == pytest.approx([0.85, 0.15])


def test_only_what_can_be_reached_from_a_row_without_data_is_missing():
    gap = P.copy()
    gap[2] = np.nan
    chain = Chain(STATES, gap)
    from_steady = step_counts(chain, {"steady": 100}, 2)
    assert from_steady[1].tolist() == [0, 80, 10, 10, 0]  # paused is entered, not yet left
    assert np.isnan(from_steady[2]).tolist() == [True] * 5  # from paused any move is allowed
    states = States(STATES.names, exits=STATES.exits, impossible=[("paused", "fresh"), ("paused", "lapsed")])
    narrow = step_counts(Chain(states, gap), {"steady": 100}, 2)
    assert np.isnan(narrow[2]).tolist() == [False, True, True, True, False]
    flows = walk(Chain(states, gap).schedule, {"steady": 100}, 2).flows
    assert np.isnan(flows[1, 2]).tolist() == [False, True, True, True, False]
    assert np.isfinite(np.delete(flows[1], 2, axis=0)).all()
    never = P.copy()
    never[0] = np.nan
    assert np.isfinite(step_counts(Chain(STATES, never), {"steady": 100}, 6)).all()  # nobody becomes fresh


def test_filled_rows_stay():
    assert filled(np.array([[np.nan, np.nan], [0.5, 0.5]])).tolist() == [[1, 0], [0.5, 0.5]]


@settings(max_examples=50, deadline=None)
@given(chains(), st.lists(st.floats(0, 1000), min_size=3, max_size=3), st.floats(0, 50))
def test_nobody_is_lost_on_the_way(chain, base, joining):
    found = walk(chain.schedule, [*base, 0], 12, [joining, 0, 0, 0])
    total = sum(base) + joining * np.arange(13)
    np.testing.assert_allclose(found.counts.sum(axis=1), total, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(found.counts[:-1], found.flows.sum(axis=2), rtol=1e-9, atol=1e-9)


@settings(max_examples=50, deadline=None)
@given(chains(), st.integers(1, 20))
def test_n_steps_are_the_power_of_the_matrix(chain, steps):
    found = cohort_shares(chain.schedule, [1, 0, 0, 0], steps)
    np.testing.assert_allclose(found[-1], np.linalg.matrix_power(chain.matrix, steps)[0], rtol=1e-10)


def test_refusals():
    with pytest.raises(CallError, match=r"inflow must be finite numbers of shape \(5,\) or \(3, 5\)"):
        as_inflow(np.zeros((2, 5)), 3, 5)
    with pytest.raises(
        CallError, match="entry is a law over the states and must add up to 1; it adds up to 2"
    ):
        cohort_shares(CHAIN.schedule, [2, 0, 0, 0, 0], 1)
