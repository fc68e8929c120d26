"""Future rates with shocks: their spread, their conditioning on the past, and every model's shape."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.estimator import fit, future_rates
from cohortflow.estimator.shock_paths import averaging, deviations, shocks_of
from tests.bench.worlds import CHAIN, STATES, cube_tally, shocked_cube

STEPS = 8


def tally(seed=1, periods=36, customers=50_000, **law):
    return cube_tally(
        shocked_cube(CHAIN, STATES, customers, periods, np.random.default_rng(seed), **law), STATES
    )


def test_without_shocks_only_the_estimation_error_is_left():
    f = fit(tally())
    calm, shaken = f.draws(2000, rng=1), future_rates(f, STEPS, 2000, rng=1)
    assert shaken.part == "rates and common shocks" and shaken.size == 2000
    ratio = shaken.matrix(0, 5)[:, 1, 4].std() / calm.matrix(0, 0)[:, 1, 4].std()
    assert 0.9 < ratio < 1.6


def test_with_shared_shocks_exits_scatter_by_their_size_and_together():
    f = fit(tally(exit_sd=0.2))
    draws = future_rates(f, STEPS, 3000, rng=2)
    logs = np.log(draws.matrix(0, 4)[:, 1:4, 4])
    assert np.all(np.abs(logs.std(axis=0) - 0.2 * (1 - f.P[1:4, 4])) < 0.05)
    assert np.corrcoef(logs.T)[0, 1] > 0.85
    # periods are as independent as the law: neighbours hardly move together when persistence is none
    steps = [np.log(draws.matrix(0, h)[:, 1, 4]) for h in (3, 4)]
    assert abs(np.corrcoef(*steps)[0, 1]) < 0.4
    assert np.allclose(
        draws.matrix(0, 4).mean(axis=0), f.P, rtol=0.06, atol=1e-4
    )  # unseen cells: half a count


def test_a_persistent_shock_goes_on_from_where_it_is():
    # the last four months had twice the odds of leaving; persistence .8 carries on for some steps, then fades
    path = np.concatenate([np.tile([0.35, 0.35, 0.35, -0.35, -0.35, -0.35], 6), np.full(4, 0.7)])
    f = fit(tally(periods=40, path=path))
    draws = future_rates(f, 24, 2000, rng=3)
    exit_now, exit_later = (np.median(draws.matrix(0, h)[:, 1, 4]) for h in (0, 23))
    assert exit_now > 1.2 * f.P[1, 4] and abs(exit_later / f.P[1, 4] - 1) < 0.2


def test_rows_stay_probability_rows_with_their_zeros():
    f = fit(tally(cell_sd=0.2, customers=500))
    draws = future_rates(f, STEPS, 50, rng=4)
    assert draws.matrices[0].shape == (50, STEPS, 5, 5)
    assert np.allclose(draws.matrices[0].sum(axis=3), 1)
    assert (draws.matrix(0, 0)[:, 4, :4] == 0).all()
    assert np.array_equal(draws.matrices[0][:, 3], draws.matrix(0, 3))
    again = future_rates(f, STEPS, 50, rng=4)
    assert np.array_equal(again.matrix(0, 2), draws.matrix(0, 2))
    assert set(draws.to_frame()["step"]) == set(range(STEPS))


def test_a_tally_is_fitted_plainly_and_refusals():
    counts = tally(customers=3000)
    assert future_rates(counts, 2, 10, rng=1).size == 10
    with pytest.raises(CallError, match="periods ahead is at least 1; got 0"):
        future_rates(counts, 0, 10, rng=1)


def test_what_a_rate_averages_over_follows_window_and_weights():
    counts = tally(customers=3000)
    shocks = shocks_of(fit(counts))
    A, which = averaging(fit(counts, window=6), shocks, 3)
    assert A.shape == (5, 1, 36) and which.tolist() == [0, 0, 0]
    assert np.allclose(A[:4].sum(axis=2), 1) and (A[:, 0, :30] == 0).all()
    seasonal = fit(counts, model="seasonal", cycle=4)
    A, which = averaging(seasonal, shocks, 5)
    assert A.shape == (5, 4, 36) and which.tolist() == [0, 1, 2, 3, 0]
    assert np.allclose(A[:4].sum(axis=2), 1)


def test_the_mean_over_what_was_seen_is_taken_off():
    """With sharp data the averages of shocks that are taken off are those that happened."""
    path = 0.3 * np.sin(np.arange(36))
    counts = tally(customers=2_000_000, path=path)
    shocks = shocks_of(fit(counts))
    recent = fit(counts, window=3)
    whole, last = (averaging(f, shocks, 1) for f in (fit(counts), recent))
    rng = np.random.default_rng(1)
    one = deviations(shocks, *whole, 400, rng)[:, 0, 1, 4].mean()
    two = deviations(shocks, *last, 400, rng)[:, 0, 1, 4].mean()
    # the same future, seen from two averages: they differ by the difference of the average shocks
    weights = last[0][1, 0] - whole[0][1, 0]
    assert one - two == pytest.approx(weights @ path, abs=0.06)
