"""Visits from one factor: against the markov room's elimination, and where exit is not certain."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import NotIdentified
from cohortflow.markov import absorb
from cohortflow.states import States
from cohortflow.whatif.block import Block
from tests.projector_cases import CHAIN, STATES, P, seasonal
from tests.whatif_cases import OTHER


def block_of(schedule, first=0):
    return Block.of(schedule.components[0], schedule, first)


def test_left_and_right_are_the_fundamental_matrix():
    block = block_of(CHAIN.schedule)
    visits, times = absorb(P, [3, 4]).visits, absorb(P, [3, 4]).mean_time
    left, right = block.solve(block.at_once(np.array([0.2, 0.5, 0.3, 0, 0])), np.ones(5))
    assert left[0] == pytest.approx([*(np.array([0.2, 0.5, 0.3]) @ visits), 0, 0])
    assert right[0] == pytest.approx([*times, 0, 0])


def test_a_season_is_one_system():
    # walked out: visits of 400 turns, starting at the second place
    block = block_of(seasonal([P, OTHER]), 1)
    left, right = block.solve(block.at_once(np.array([0, 1.0, 0, 0, 0])), np.ones(5))
    x, seen = np.array([0, 1.0, 0, 0, 0]), np.zeros((2, 5))
    for h in range(800):
        seen[h % 2] += x
        x = x @ (OTHER, P)[h % 2]
        x[3:] = 0
    assert left == pytest.approx(seen) and block.onward(1) == 0 and block.cycle == 2
    assert right[0, 1] == pytest.approx(seen.sum())
    assert block.everywhere(np.ones(5)).tolist() == np.ones((2, 5)).tolist()


def test_a_held_sequence_ends_in_its_last_matrix():
    block = block_of(seasonal([P, OTHER], tail="hold"))
    assert (block.positions, block.cycle, block.onward(1)) == ((0, 1), 1, 1)
    assert block.everywhere(np.ones(5))[0].tolist() == [0] * 5
    assert block_of(seasonal([P, OTHER], tail="hold"), 7).positions == (1,)
    _, right = block.solve(block.at_once(np.eye(5)[1]), np.ones(5))
    later = absorb(OTHER, [3, 4]).mean_time
    assert right[0, :3] == pytest.approx(1 + P[:3, :3] @ later)


def test_somebody_who_stays_for_ever_is_refused_and_others_are_kept():
    states = States(["a", "b", "trap", "out"], exits=["out"])
    chain = Chain(states, [[0.5, 0, 0.4, 0.1], [0, 0.8, 0, 0.2], [0, 0, 1, 0], [0, 0, 0, 1]])
    block = block_of(chain.schedule)
    with pytest.raises(NotIdentified, match="Exit is not certain for everybody who gets into this figure"):
        block.solve(block.at_once(np.array([1.0, 0, 0, 0])), np.ones(4))
    left, right = block.solve(block.at_once(np.array([0, 1.0, 0, 0])), np.ones(4))
    assert left[0] == pytest.approx([0, 5, 0, 0]) and right[0, 1] == pytest.approx(5)
    assert np.isnan(right[0, [0, 2]]).all()


def test_a_row_without_data_is_no_certain_exit():
    rows = P.copy()
    rows[2] = np.nan
    block = block_of(Chain(STATES, rows).schedule)
    with pytest.raises(NotIdentified, match="Exit is not certain"):
        block.solve(block.at_once(np.eye(5)[1]), np.ones(5))
