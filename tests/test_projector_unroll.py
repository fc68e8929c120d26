"""A Schedule as one chain: blocks in order, exits absorbing, laws in the first block."""

import numpy as np

from cohortflow.chain import Chain, Draws
from cohortflow.projector.mix import step_counts
from cohortflow.projector.unroll import drawn_schedule, unroll
from tests.projector_cases import CHAIN, STATES, P, banded, seasonal, two_types


def test_a_plain_chain_is_itself():
    found = unroll(CHAIN.schedule)
    assert np.array_equal(found.P, P) and found.exits == (3, 4) and found.place.tolist() == [0] * 5
    assert np.array_equal(found.start, np.eye(5)) and found.inside.tolist() == [True] * 3 + [False] * 2


def test_a_cycle_leads_round_and_a_held_sequence_stays_with_its_last():
    other = P.copy()
    other[1] = [0, 0.5, 0.3, 0.2, 0]
    cycle = unroll(seasonal([P, other]), first_step=1)
    # first block acts with `other` (step 1), the second with P; exits absorb where they stand
    assert np.array_equal(cycle.P[:3, 5:], other[:3]) and np.array_equal(cycle.P[5:8, :5], P[:3])
    assert cycle.exits == (3, 4, 8, 9) and (np.diag(cycle.P)[[3, 4, 8, 9]] == 1).all()
    held = unroll(seasonal([P, other], tail="hold"))
    assert np.array_equal(held.P[:3, 5:], P[:3]) and np.array_equal(held.P[5:8, 5:], other[:3])
    assert len(unroll(seasonal([P, other], tail="hold"), first_step=5).P) == 5


def test_the_unrolled_chain_walks_like_the_schedule():
    for schedule in (seasonal([P, np.roll(P, 0)]), two_types()[0], banded()[0]):
        chain = unroll(schedule)
        law = np.zeros(len(schedule.states))
        law[0] = 1.0
        x = law @ chain.start
        for _ in range(5):
            x = x @ chain.P
        folded = np.bincount(chain.report, weights=x, minlength=len(law))
        np.testing.assert_allclose(folded, step_counts(schedule, law, 5)[5], atol=1e-14)


def test_what_can_reach_a_row_without_data_is_clouded():
    gap = P.copy()
    gap[2] = np.nan
    found = unroll(Chain(STATES, gap).schedule)
    assert found.undefined().tolist() == [True, True, True, False, False]
    gap = P.copy()
    gap[0] = np.nan
    assert unroll(Chain(STATES, gap).schedule).undefined().tolist() == [True, False, False, False, False]


def test_one_draw_is_a_schedule_of_its_own():
    schedule = two_types()[0]
    drawn = [np.stack([c.matrices, c.matrices * 0.5]) for c in schedule.components]
    second = drawn_schedule(Draws.of_matrices(schedule, drawn), 1)
    # rows are divided by their sum again
    assert np.array_equal(second.components[0].matrices, schedule.components[0].matrices)
    assert second.components[1].name == "fragile"
