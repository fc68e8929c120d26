"""What the mathematics accepts at the door, and the words with which it refuses."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.markov import arguments


def test_a_checked_matrix_is_a_fresh_copy():
    given = np.array([[0.5, 0.5], [0.0, 1.0]])
    checked = arguments.check_stochastic(given)
    checked[0, 0] = 0.0
    assert given[0, 0] == 0.5


@pytest.mark.parametrize("check", [arguments.check_stochastic, arguments.check_substochastic])
@pytest.mark.parametrize(
    ("matrix", "words"),
    [
        ([0.5, 0.5], r"has shape \(2,\); it must be a square matrix, row = from, column = to"),
        ([[0.5, 0.5]], r"has shape \(1, 2\); it must be a square matrix"),
        (np.zeros((0, 0)), r"has shape \(0, 0\); it must be a square matrix"),
        (
            [[0.5, 0.5], [np.nan, np.nan]],
            r"row 1 of . holds nan: nothing is known about moves out of state 1",
        ),
        ([[np.inf, 0.5], [0.0, 1.0]], r"row 0 of . holds inf"),
        ([[1.2, -0.2], [0.0, 1.0]], r".\[0, 1\] is -0\.2; a probability is never negative"),
        ([[0.5, 0.6], [0.0, 1.0]], r"row 0 of . sums to 1\.1"),
    ],
)
def test_bad_matrices_are_refused_with_the_place(check, matrix, words):
    with pytest.raises(CallError, match=words):
        check(matrix)


def test_a_row_short_of_one_is_refused_for_a_chain_and_taken_for_a_part_of_one():
    with pytest.raises(CallError, match=r"row 1 of P sums to 0\.9; each row must sum to 1 \(within 1e-09\)"):
        arguments.check_stochastic([[0.5, 0.5], [0.5, 0.4]])
    assert arguments.check_substochastic([[0.5, 0.5], [0.5, 0.4]]).shape == (2, 2)


def test_rounding_in_the_ninth_digit_passes_and_more_does_not():
    arguments.check_stochastic([[0.5, 0.5 + 5e-10], [0.0, 1.0]])
    with pytest.raises(CallError, match="sums to 1.000000002"):
        arguments.check_stochastic([[0.5, 0.5 + 2e-9], [0.0, 1.0]])


def test_a_start_may_be_a_law_or_a_state():
    assert arguments.check_start([0.25, 0.75], 2).tolist() == [0.25, 0.75]
    assert arguments.check_start(np.int64(1), 2).tolist() == [0.0, 1.0]


@pytest.mark.parametrize("start", [[0.5, 0.6], [1.5, -0.5], [120.0, 40.0]])
def test_a_start_that_is_no_law_is_refused(start):
    with pytest.raises(CallError, match="start must be a law, not negative and of sum 1; its smallest entry"):
        arguments.check_start(start, 2)


def test_vectors_must_fit_and_be_finite():
    with pytest.raises(CallError, match=r"reward has shape \(2,\); it needs one number for each of 3 states"):
        arguments.check_vector([1, 2], 3, name="reward")
    with pytest.raises(CallError, match=r"reward\[1\] is nan; every entry must be a finite number"):
        arguments.check_vector([1, np.nan, 3], 3, name="reward")


@pytest.mark.parametrize("chosen", [[3], [-1], ["left"], [1.0], [True]])
def test_states_are_named_by_their_index(chosen):
    with pytest.raises(CallError, match="exits holds .*; it takes indices of states, 0 to 2"):
        arguments.check_states(chosen, 3, name="exits")


def test_no_states_at_all_is_refused():
    with pytest.raises(CallError, match="exits is empty; name at least one state by its index, 0 to 2"):
        arguments.check_states([], 3, name="exits")


@pytest.mark.parametrize("steps", [-1, 2.5, True, None])
def test_steps_are_whole_numbers(steps):
    with pytest.raises(CallError, match="steps is .*; it must be a whole number of periods, at least 0"):
        arguments.check_steps(steps)


def test_what_a_record_carries_cannot_be_written_to():
    carried = arguments.read_only([1.0, 2.0])
    with pytest.raises(ValueError, match="read-only"):
        carried[0] = 3.0
