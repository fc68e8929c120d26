"""Time to exit, which exit, who is still there: by hand, against scipy's laws, and in 50 digits."""

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from scipy import stats

from cohortflow.errors import CallError
from cohortflow.markov import absorb
from tests.markov_chains import LIFECYCLE, chains, closed_off, losing

TRAP = np.array([[0.5, 0.2, 0.2, 0.1], [0.0, 0.4, 0.0, 0.6], [0.0, 0.0, 1.0, 0.0], [0.0, 0.0, 0.0, 1.0]])


@given(losing())
@settings(deadline=None)
def test_plain_formulae_give_the_same(Q):
    P, size = closed_off(Q), len(Q)
    found = absorb(P, [size])
    N = np.linalg.inv(np.eye(size) - Q)
    tau = N.sum(axis=1)
    assert found.visits == pytest.approx(N, rel=1e-9, abs=1e-12)
    assert found.mean_time == pytest.approx(tau, rel=1e-9)
    assert found.variance_time == pytest.approx((2 * N - np.eye(size)) @ tau - tau**2, rel=1e-7, abs=1e-9)
    assert found.sd_time == pytest.approx(np.sqrt(found.variance_time))
    assert found.exit_probability.ravel() == pytest.approx(1.0)
    assert found.certain.all() and found.cautions == () and found.undeclared == ()


@given(losing())
@settings(deadline=None)
def test_retention_and_distribution_say_the_same_as_the_moments(Q):
    found = absorb(closed_off(Q), [len(Q)])
    steps = 1000
    curve, law = found.retention(steps), found.distribution(steps)
    assert 1 - np.cumsum(law.sum(axis=2), axis=0) == pytest.approx(curve[1:], abs=1e-10)
    assert curve.sum(axis=0) == pytest.approx(found.mean_time, rel=1e-8)
    assert law.sum(axis=0) == pytest.approx(found.exit_probability, abs=1e-10)
    assert (np.diff(curve, axis=0) <= 1e-15).all()


@given(chains(least=3))
@settings(deadline=None)
def test_some_leave_by_each_exit_and_the_rest_stay(P):
    size = len(P)
    P = P.copy()
    P[-1], P[-2] = np.eye(size)[-1], np.eye(size)[-2]
    found = absorb(P, [size - 1, size - 2])
    high = np.linalg.matrix_power(P, 2**15)
    assert found.exit_probability == pytest.approx(high[: size - 2, size - 2 :], abs=1e-9)
    assert np.isfinite(found.mean_time).tolist() == found.certain.tolist()
    assert np.isnan(found.variance_time).tolist() == (~found.certain).tolist()
    assert [c.state for c in found.cautions] == [s for s, ok in enumerate(found.certain) if not ok]


def test_one_state_is_a_geometric_law():
    found, law = absorb([[0.7, 0.3], [0.0, 1.0]], [1]), stats.geom(0.3)
    assert found.mean_time[0] == pytest.approx(law.mean())
    assert found.variance_time[0] == pytest.approx(law.var())
    assert found.median_time[0] == law.median()
    for share in (0.05, 0.3, 0.51, 0.9, 0.999):
        assert found.quantile(share)[0] == law.ppf(share)
    assert found.distribution(5)[:, 0, 0] == pytest.approx(law.pmf(np.arange(1, 6)))
    assert found.retention(5)[:, 0] == pytest.approx(law.sf(np.arange(6)))


def test_a_share_reached_exactly_counts():
    # after one period exactly half, after two exactly three quarters are gone
    found = absorb([[0.5, 0.5], [0.0, 1.0]], [1])
    assert found.quantile(0.5).tolist() == [1.0] and found.quantile(0.75).tolist() == [2.0]
    # 1 - 0.9^k with 0.9 not exact in binary: a tenth is gone after one period
    assert absorb([[0.9, 0.1], [0.0, 1.0]], [1]).quantile(0.1).tolist() == [1.0]


def test_quantiles_are_those_of_the_curve():
    found = absorb(LIFECYCLE, [4])
    curve = found.retention(200)
    for share in (0.1, 0.5, 0.9):
        assert found.quantile(share).tolist() == np.argmax(curve <= 1 - share, axis=0).tolist()


def test_a_base_that_hardly_loses_anybody_keeps_its_digits():
    # Two states in turn, exits of 3e-13 and 1e-13: in 50 digits, tau = (I - Q)^{-1} 1 with the diagonal
    # from the rest
    P = np.array([[0.4, 0.6 - 3e-13, 3e-13], [0.7, 0.3 - 1e-13, 1e-13], [0.0, 0.0, 1.0]])
    with mpmath.workdps(50):
        a, x = mpmath.mpf(float(P[0, 1])), mpmath.mpf(3e-13)
        b, y = mpmath.mpf(0.7), mpmath.mpf(1e-13)
        det = (a + x) * (b + y) - a * b
        exact = [(b + y + a) / det, (a + x + b) / det]
        # variance of a phase-type law: 2 N tau - tau - tau^2
        twice = [
            2 * ((b + y) * exact[0] + a * exact[1]) / det - exact[0] - exact[0] ** 2,
            2 * (b * exact[0] + (a + x) * exact[1]) / det - exact[1] - exact[1] ** 2,
        ]
    found = absorb(P, [2])
    assert found.mean_time == pytest.approx([float(t) for t in exact], rel=1e-14)
    assert found.variance_time == pytest.approx([float(t) for t in twice], rel=1e-13)


def test_undeclared_absorbing_states_are_named():
    # state 2 is never left and is no exit. From 0: P(exit) = (0.1 + 0.2) / 0.5 = 0.6, the rest is caught in 2
    found = absorb(TRAP, [3])
    assert found.undeclared == ((2,),)
    assert found.exit_probability.ravel().tolist() == pytest.approx([0.6, 1.0, 0.0])
    assert found.mean_time.tolist() == pytest.approx([math.inf, 1 / 0.6, math.inf])
    assert np.isnan(found.variance_time).tolist() == [True, False, True]
    assert found.visits[0].tolist() == pytest.approx([2.0, 2 * 0.2 / 0.6, math.inf])
    assert found.visits[2].tolist() == [0.0, 0.0, math.inf]
    assert [(c.state, c.code) for c in found.cautions] == [(0, "may_not_exit"), (2, "never_exits")]
    assert "only 0.6 ever leave" in found.cautions[0].reason and "[(2,)]" in found.cautions[0].reason


def test_quantiles_where_not_everybody_leaves():
    found = absorb(TRAP, [3])
    assert found.quantile(0.3)[0] < math.inf  # 60 % leave in the end
    assert found.quantile(0.6).tolist()[0] == math.inf  # a share reached only in the limit is never reached
    assert found.median_time[2] == math.inf


def test_records_cannot_be_written_to():
    with pytest.raises(ValueError, match="read-only"):
        absorb(LIFECYCLE, [4]).mean_time[0] = 0.0


def test_an_exit_with_a_way_back_is_refused():
    with pytest.raises(
        CallError, match=r"state 1 is named as an exit but has moves to \[0\]: an exit is never left"
    ):
        absorb([[0.9, 0.1], [0.04, 0.96]], [1])


def test_a_chain_of_exits_only_is_refused():
    with pytest.raises(CallError, match="every state is named as an exit; at least one must be left inside"):
        absorb(np.eye(2), [0, 1])


@pytest.mark.parametrize("share", [0.0, 1.0, -0.1, 2])
def test_a_quantile_lies_between(share):
    with pytest.raises(CallError, match="share is .*; it must lie strictly between 0 and 1"):
        absorb(LIFECYCLE, [4]).quantile(share)
