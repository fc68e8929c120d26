"""Joining neighbours that do not differ."""

import numpy as np
import pytest

from cohortflow.estimator.merge import gain, joined


def test_gain_by_hand():
    # [30, 10] against [10, 30]: LR = 2 (2 (30 log .75 + 10 log .25) - 80 log .5) = 2 (-44.987 + 55.452) =
    # 20.930; one parameter saved costs log 80 = 4.382
    one, two = np.array([[30.0, 10.0], [0, 0]]), np.array([[10.0, 30.0], [0, 0]])
    expected = 2 * (2 * (30 * np.log(0.75) + 10 * np.log(0.25)) - 80 * np.log(0.5)) - np.log(80)
    assert gain(one, two, np.ones(2), 80) == pytest.approx(expected) and expected == pytest.approx(
        16.548, abs=1e-3
    )
    # customers who differ make the same evidence weaker
    assert gain(one, two, np.full(2, 10.0), 80) < 0


def test_the_change_point_is_found_where_it_is():
    rng = np.random.default_rng(1)
    shares = [[0.6, 0.4]] * 2 + [[0.8, 0.2]] * 4
    groups = np.array([[rng.multinomial(3000, p), [0, 0]] for p in shares], dtype=float)
    assert joined(groups, np.ones(2)) == [0, 2]
    assert joined(groups[2:], np.ones(2)) == [0]
