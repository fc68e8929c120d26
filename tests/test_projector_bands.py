"""Bands: the simulation and the exact recursion say the same; parts switch on and off; seeds reproduce."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.projector.bands import check_parts, drawn_means, moments, quantile_band, simulate
from cohortflow.projector.joiners import Inflow, Joiners
from cohortflow.projector.mix import step_counts
from tests.projector_cases import CHAIN, MONTHS, STATES, P, banded, dirichlet_draws, seasonal, two_types

START = np.array([40.0, 300, 60, 0, 0])


def random_joiners(states=STATES, periods=6, concentration=20.0):
    """Numbers whose rate varies from period to period and all together, with a mix that varies too."""
    mean = np.linspace(30, 60, periods)
    extra = 0.01 * np.outer(mean, mean) + np.diag(0.02 * mean**2)
    law = np.array([0.7, 0.2, 0.1, 0, 0])[: len(states)] if len(states) > 2 else np.array([1.0, 0.0])
    inflow = Inflow(mean, extra, np.tile(law / law.sum(), (periods, 1)), concentration)
    back = Inflow(np.full(periods, 4.0), np.zeros((periods, periods)), inflow.mix)
    return Joiners(states, MONTHS, None, "test", {"joined": inflow, "returned": back})


def simulated(schedule, start, joiners=None, size=20_000, seed=5, **options):
    return simulate(
        schedule, start, 6, size=size, rng=np.random.default_rng(seed), joiners=joiners, **options
    )


@pytest.mark.parametrize("name", ["chain", "season", "types", "bands"])
def test_exact_moments_agree_with_simulation(name):
    # independent check: 20,000 simulated bases; tolerance five standard errors of a simulated variance
    schedule = {
        "chain": CHAIN.schedule,
        "season": seasonal([P, np.vstack([P[0], [0, 0.5, 0.3, 0.1, 0.1], P[2:]])]),
        "types": two_types()[0],
        "bands": banded()[0],
    }[name]
    start = START if len(schedule.states) == 5 else np.array([300.0, 0])
    joiners = random_joiners(schedule.states)
    paths = simulated(schedule, start, joiners)
    exact = moments(schedule, start, 6, joiners=joiners)
    total = exact.chance + exact.joiners
    for h in (1, 3, 6):
        seen = np.cov(paths[:, h].T)
        scale = np.sqrt(np.outer(np.diag(total[h]), np.diag(total[h]))) + 1e-9
        assert np.abs(seen - total[h]).max() < 5 * np.sqrt(2 / 20_000) * scale.max() * 1.5
        # the mean of 20,000 paths, within five standard errors
        error = np.abs(paths[:, h].mean(axis=0) - exact.mean[h])
        assert (error <= 5 * np.sqrt(np.diag(total[h]) / 20_000) + 1e-9).all()


def test_closed_cohort_has_the_multinomial_covariance():
    # closed form: sum_i x_i (diag q_i - q_i q_i'), q_i the rows of P^h
    q = np.linalg.matrix_power(P, 5)
    expected = sum(x * (np.diag(row) - np.outer(row, row)) for x, row in zip(START, q, strict=True))
    np.testing.assert_allclose(moments(CHAIN.schedule, START, 5).chance[5], expected, atol=1e-10)
    np.testing.assert_allclose(moments(CHAIN.schedule, START, 5).mean, step_counts(CHAIN, START, 5))


def test_poisson_joiners_leave_independent_poisson_counts():
    # a base that only Poisson joiners fill: independent Poisson counts (Bartholomew), covariance diag(mean)
    inflow = Inflow(np.full(6, 25.0), np.zeros((6, 6)), np.tile([0.6, 0.4, 0, 0, 0], (6, 1)))
    joiners = Joiners(STATES, MONTHS, None, "test", {"joined": inflow})
    exact = moments(CHAIN.schedule, np.zeros(5), 6, joiners=joiners)
    for h in range(7):
        np.testing.assert_allclose((exact.chance + exact.joiners)[h], np.diag(exact.mean[h]), atol=1e-9)


def test_chance_alone_and_joiners_alone():
    joiners = random_joiners()
    exact = moments(CHAIN.schedule, START, 6, joiners=joiners)
    only_joiners = simulated(CHAIN.schedule, START, joiners, chance=False)
    only_chance = simulated(CHAIN.schedule, START, joiners, joiners_vary=False)
    for paths, part in ((only_joiners, exact.joiners), (only_chance, exact.chance)):
        live = paths[:, 6, :2].sum(axis=1).var(ddof=1)
        assert live == pytest.approx(part[6, :2, :2].sum(), rel=0.06)  # 6 sigma of a variance of 20,000
    nothing = simulated(CHAIN.schedule, START, joiners, size=3, chance=False, joiners_vary=False)
    expected = step_counts(CHAIN, START, 6, joiners.expected())
    np.testing.assert_allclose(nothing, np.broadcast_to(expected, nothing.shape), atol=1e-9)


def test_whole_customers_stay_whole_and_none_is_lost():
    paths = simulated(CHAIN.schedule, START, random_joiners(), size=50)
    assert np.array_equal(paths, np.round(paths)) and (paths >= 0).all()
    closed = simulated(CHAIN.schedule, START, size=50)
    assert (closed.sum(axis=2) == START.sum()).all()


def test_fractions_move_as_expected():
    shares = np.array([0.25, 0.5, 0.25, 0, 0])
    paths = simulated(CHAIN.schedule, shares, size=3)
    np.testing.assert_allclose(paths[0], step_counts(CHAIN, shares, 6), atol=1e-12)


def test_the_same_seed_gives_the_same_paths():
    one, two, other = (simulated(CHAIN.schedule, START, random_joiners(), size=40, seed=s) for s in (1, 1, 2))
    assert np.array_equal(one, two) and not np.array_equal(one, other)


def test_draws_of_the_rates_move_the_means():
    M = dirichlet_draws(P, 200, 500)
    draws = Draws.of_matrices(CHAIN.schedule, [M[:, None]])
    means = drawn_means(draws, START, 4, inflow=np.tile([10.0, 0, 0, 0, 0], (4, 1)))
    for d in (0, 99):
        expected = step_counts(Chain(STATES, M[d]), START, 4, [10, 0, 0, 0, 0])
        np.testing.assert_allclose(means[d], expected, atol=1e-9)
    paths = simulated(CHAIN.schedule, START, size=500, draws=draws, chance=False)
    np.testing.assert_allclose(paths[:, :5], drawn_means(draws, START, 4), atol=1e-9)


def test_both_errors_add_up():
    # total variance = E[chance] + Var[mean] (law of total variance), over 4,000 draws
    M = dirichlet_draws(P, 150, 4000)
    draws = Draws.of_matrices(CHAIN.schedule, [M[:, None]])
    both = simulated(CHAIN.schedule, START, size=4000, draws=draws)[:, 6, :2].sum(axis=1).var()
    rates = drawn_means(draws, START, 6)[:, 6, :2].sum(axis=1).var()
    chance = moments(CHAIN.schedule, START, 6).chance[6, :2, :2].sum()
    assert both == pytest.approx(rates + chance, rel=0.1)


def test_draws_of_shocks_count_their_steps_from_the_base():
    schedule = seasonal([P] * 12)
    worse = np.vstack([P[0], [0, 0.5, 0.1, 0.4, 0], P[2:]])
    future = np.stack([np.stack([P, worse])] * 2)  # first step ahead P, then worse
    draws = Draws.of_matrices(schedule, [future], part="rates and common shocks")
    found = drawn_means(draws, np.array([0.0, 100, 0, 0, 0]), 2, first_step=7)
    assert found[0, 1, 1] == pytest.approx(80) and found[0, 2, 1] == pytest.approx(80 * 0.5 + 10 * 0.5)


def test_parts_are_known_by_name():
    assert check_parts(["joiners", "rates", "rates"]) == ("rates", "joiners")
    with pytest.raises(CallError, match=r'Unknown part "change" \(did you mean "chance"'):
        check_parts(["change"])


def test_a_band_is_missing_where_a_draw_is():
    band = quantile_band(np.array([[1.0, np.nan], [3.0, 1.0]]), 0.5)
    assert band[:, 0].tolist() == [1.5, 2.5] and np.isnan(band[:, 1]).all()
