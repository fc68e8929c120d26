"""First times by doubling steps, against a plain loop and against a closed form."""

import math

import numpy as np
import pytest

from cohortflow.markov.powers import first_time
from tests.markov_chains import LIFECYCLE


def test_it_finds_what_a_loop_finds():
    laws = np.eye(5)
    expected = []
    for law in laws:
        t = 0
        while law[4] < 0.6:
            law, t = law @ LIFECYCLE, t + 1
        expected.append(float(t))
    assert first_time(LIFECYCLE, laws, lambda mix: mix[:, 4] >= 0.6).tolist() == expected


def test_very_long_times_keep_their_digits():
    # half-life of a state left with probability 1e-12 a period: log(1/2)/log(1 - 1e-12)
    leave = 1e-12
    P = np.array([[1 - leave, leave], [0.0, 1.0]])
    (found,) = first_time(P, np.eye(2)[:1], lambda mix: mix[:, 0] <= 0.5)
    assert found == pytest.approx(
        math.log(0.5) / math.log1p(-leave), rel=1e-4
    )  # 1 - 1e-12 itself has 4 digits


def test_what_never_comes_is_infinite():
    assert first_time(np.eye(2), np.eye(2), lambda mix: mix[:, 1] > 0.5).tolist() == [math.inf, 0.0]
