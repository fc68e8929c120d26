"""Intervals: edges, arrays, laws and refusals (published figures stand in tests/reference)."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.errors import CallError
from cohortflow.estimator.interval import (
    PER_CELL,
    clopper_pearson,
    goodman,
    mid_p,
    quesenberry_hurst,
    row_limits,
    wilson,
)


def test_nothing_at_risk_is_nothing_known():
    for method in PER_CELL.values():
        assert [float(side) for side in method(0, 0)] == [0.0, 1.0]
    assert [side.tolist() for side in goodman([0, 0, 0])] == [[0, 0, 0], [1, 1, 1]]


@given(n=st.integers(1, 2000), share=st.floats(0, 1), level=st.sampled_from([0.8, 0.9, 0.95, 0.99]))
def test_limits_hold_the_share_mirror_and_widen_with_the_level(n, share, level):
    x = round(share * n)
    for name, method in PER_CELL.items():
        low, high = method(x, n, level=level)
        assert 0 <= low <= x / n <= high <= 1, name
        mirror = method(n - x, n, level=level)
        assert np.allclose([1 - mirror[1], 1 - mirror[0]], [low, high], atol=1e-9), name
        wider = method(x, n, level=0.995)
        assert wider[0] <= low + 1e-12 and wider[1] >= high - 1e-12, name


def test_the_closed_form_of_nothing_seen():
    # exact upper limit of 0 of n is 1 - (alpha/2)^(1/n); mid-P solves (1-p)^n / 2 = alpha/2
    assert clopper_pearson(0, 20)[1] == pytest.approx(1 - 0.025 ** (1 / 20), rel=1e-12)
    assert mid_p(0, 20)[1] == pytest.approx(1 - 0.05 ** (1 / 20), rel=1e-12)


def test_fractional_counts_lie_between_whole_ones():
    lows = [float(clopper_pearson(x, 20)[0]) for x in (3, 3.5, 4)]
    assert lows[0] < lows[1] < lows[2]


def test_goodman_switches_to_exact_limits_where_a_cell_is_small():
    # three cells, smallest count 4 < 5: Clopper-Pearson at 1 - .05/3 each; with 5 it is Wilson at the same
    # level
    small, big = goodman([30, 10, 4]), goodman([30, 10, 5])
    exact = clopper_pearson([30, 10, 4], 44, level=1 - 0.05 / 3)
    score = wilson([30, 10, 5], 45, level=1 - 0.05 / 3)
    assert np.allclose(small, exact) and np.allclose(big, score)
    assert np.allclose(goodman([30, 10, 4], switch_below=0), wilson([30, 10, 4], 44, level=1 - 0.05 / 3))


def test_cells_that_are_impossible_do_not_count_as_cells():
    allowed = [[True, True, False]]
    # two open cells: the level of each is 1 - .05/2; the closed cell is exactly [0, 0]
    low, high = goodman([[30, 10, 0]], allowed=allowed)
    expected = wilson([30, 10], 40, level=0.975)
    assert np.allclose(low[0, :2], expected[0]) and np.allclose(high[0, :2], expected[1])
    assert low[0, 2] == high[0, 2] == 0
    assert row_limits([[30, 10, 0]], allowed=allowed, method="jeffreys")[1][0, 2] == 0


def test_two_cells_of_quesenberry_and_hurst_are_wilson():
    # K = 2: chi-square(1) at .95 is 1.96^2
    assert np.allclose(quesenberry_hurst([30, 10]), wilson([30, 10], 40))


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: wilson(5, 3), r"0 <= x <= n; got x = 5 of n = 3"),
        (lambda: wilson(-1, 3), r"0 <= x <= n"),
        (lambda: wilson(1, 3, level=95), r"level is a share between 0 and 1, for instance 0.95; got 95"),
        (lambda: goodman([1, -2]), r"numbers of 0 or more"),
        (lambda: goodman([1, 2], allowed=[True, False]), r"not allowed has a count above 0"),
        (
            lambda: row_limits([1, 2], method="wilsn"),
            r'Unknown interval method "wilsn" \(did you mean "wilson"',
        ),
    ],
)
def test_refusals(call, text):
    with pytest.raises(CallError, match=text):
        call()
