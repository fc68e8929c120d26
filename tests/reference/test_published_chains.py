"""Published worked examples of chains, one test each; the source of every figure stands beside it.

VERIFIED: seen in an opened source or printed by an independent reference program. MEMORY: recalled from the
named text and recomputed. `dp(n)` compares within half a unit of the n-th decimal, as printed.
"""

import math

import numpy as np
import pytest
from scipy.stats import poisson

from cohortflow.markov import (
    absorb,
    analyse,
    cycle_limits,
    discounted_value_derivative,
    exit_time_derivative,
    first_passage_law,
    fundamental_matrix,
    hit_before,
    horizon_value_derivative,
    kemeny_constant,
    limit_matrix,
    mean_first_passage,
    mean_time_to,
    mean_time_to_absorption,
    occupation_times,
    remaining,
    root,
    second_eigenvalue_modulus,
    stationary,
    stationary_laws,
    stationary_of_rates,
    time_average_matrix,
    transition_matrix,
    variance_first_passage,
)

power = np.linalg.matrix_power


def dp(places: int) -> dict[str, float]:
    return {"abs": 0.5 * 10.0**-places + 1e-12, "rel": 0}


# C01 Land of Oz, states rain, nice, snow. Kemeny, Snell & Thompson, Introduction to Finite Mathematics;
# Kemeny & Snell, Finite Markov Chains (p. 83 variances, p. 218 first passages, as cited in giddy).
# VERIFIED in giddy's docstrings.
OZ = np.array([[0.5, 0.25, 0.25], [0.5, 0.0, 0.5], [0.25, 0.25, 0.5]])


def test_c01_oz_stationary():
    assert stationary(OZ) == pytest.approx([2 / 5, 1 / 5, 2 / 5], abs=1e-15)


def test_c01_oz_first_passage():
    published = [[5 / 2, 4, 10 / 3], [8 / 3, 5, 8 / 3], [10 / 3, 4, 5 / 2]]
    assert mean_first_passage(OZ) == pytest.approx(np.array(published), rel=1e-14)


def test_c01_oz_variance_of_first_passage():
    published = [[67 / 12, 12, 62 / 9], [56 / 9, 12, 56 / 9], [62 / 9, 12, 67 / 12]]
    assert variance_first_passage(OZ) == pytest.approx(np.array(published), rel=1e-14)


def test_c01_oz_three_steps_from_nice():
    assert power(OZ, 3)[1].tolist() == [0.40625, 0.1875, 0.40625]


def test_c01_oz_seven_steps_from_nice():
    assert power(OZ, 7)[1] == pytest.approx([0.4000244, 0.1999512, 0.4000244], **dp(7))


def test_c01_oz_seven_steps_from_rain():
    assert power(OZ, 7)[0] == pytest.approx([0.4000244, 0.2000122, 0.3999634], **dp(7))


def test_c01_oz_is_regular():
    found = analyse(OZ)
    assert found.irreducible and found.periods == (1,) and found.verdict == "unique_limit"


def test_c01_oz_fundamental_matrix():
    # MEMORY: Grinstead & Snell, Introduction to Probability, section 11.5: Z = (1/75) [...]
    assert 75 * fundamental_matrix(OZ) == pytest.approx(
        np.array([[86, 3, -14], [6, 63, 6], [-14, 3, 86]]), abs=1e-12
    )


def test_c01_oz_eigenvalues_and_kemeny():
    # eigenvalues 1, 1/4, -1/4, so tr Z = 1 + 4/3 + 4/5 = 47/15
    assert second_eigenvalue_modulus(OZ) == pytest.approx(0.25, rel=1e-14)
    assert kemeny_constant(OZ) == pytest.approx(47 / 15, rel=1e-14)


def walk(last: int) -> np.ndarray:
    """The symmetric walk on 0 .. last, its ends absorbing."""
    P = np.zeros((last + 1, last + 1))
    P[0, 0] = P[last, last] = 1.0
    for i in range(1, last):
        P[i, i - 1] = P[i, i + 1] = 0.5
    return P


# C02 classics. VERIFIED: R markovchain vignette section 4.6 after Grinstead & Snell, example 11.x
def test_c02a_walk_of_five_time_to_the_ends():
    assert absorb(walk(4), [0, 4]).mean_time.tolist() == pytest.approx([3, 4, 3], rel=1e-15)


def test_c02a_walk_of_five_which_end():
    published = [[0.75, 0.25], [0.5, 0.5], [0.25, 0.75]]
    assert absorb(walk(4), [0, 4]).exit_probability == pytest.approx(np.array(published), rel=1e-15)


def test_c02a_walk_of_five_visits():
    # MEMORY: Grinstead & Snell, section 11.2
    published = [[1.5, 1, 0.5], [1, 2, 1], [0.5, 1, 1.5]]
    assert absorb(walk(4), [0, 4]).visits == pytest.approx(np.array(published), rel=1e-15)


def test_c02a_walk_of_five_variance():
    # recomputed for the check values: (8, 8, 8)
    assert absorb(walk(4), [0, 4]).variance_time.tolist() == pytest.approx([8, 8, 8], rel=1e-14)


def test_c02b_walk_of_six_time():
    # VERIFIED: Grinstead & Snell p. 422, in the tests of the octave queueing toolbox
    assert absorb(walk(5), [0, 5]).mean_time.tolist() == pytest.approx([4, 6, 6, 4], rel=1e-14)


def test_c02b_walk_of_six_which_end():
    chance = absorb(walk(5), [0, 5]).exit_probability
    assert chance[:, 0].tolist() == pytest.approx([0.8, 0.6, 0.4, 0.2], rel=1e-14)
    assert chance[:, 1].tolist() == pytest.approx([0.2, 0.4, 0.6, 0.8], rel=1e-14)


# Ehrenfest urn, n = 4. VERIFIED: Grinstead & Snell p. 461, in the tests of the octave queueing toolbox
EHRENFEST = np.array(
    [[0, 1, 0, 0, 0], [0.25, 0, 0.75, 0, 0], [0, 0.5, 0, 0.5, 0], [0, 0, 0.75, 0, 0.25], [0, 0, 0, 1, 0]]
)


def test_c02c_ehrenfest_stationary():
    assert stationary(EHRENFEST).tolist() == pytest.approx(
        [1 / 16, 4 / 16, 6 / 16, 4 / 16, 1 / 16], rel=1e-15
    )


def test_c02c_ehrenfest_first_passage():
    published = [
        [16, 1, 2.6667, 6.3333, 21.3333],
        [15, 4, 1.6667, 5.3333, 20.3333],
        [18.6667, 3.6667, 2.6667, 3.6667, 18.6667],
        [20.3333, 5.3333, 1.6667, 4, 15],
        [21.3333, 6.3333, 2.6667, 1, 16],
    ]
    assert mean_first_passage(EHRENFEST) == pytest.approx(np.array(published), **dp(4))


def test_c02c_ehrenfest_has_period_two():
    assert analyse(EHRENFEST).periods == (2,) and analyse(EHRENFEST).verdict == "no_limit"
    assert second_eigenvalue_modulus(EHRENFEST) == pytest.approx(1)


def test_c02c_ehrenfest_cycle():
    # recomputed for the check values: P^100 row 0 = (1/8, 0, 3/4, 0, 1/8), P^101 row 0 = (0, 1/2, 0, 1/2, 0)
    even, odd = cycle_limits(EHRENFEST, 0)
    assert even == pytest.approx([1 / 8, 0, 3 / 4, 0, 1 / 8], abs=1e-14)
    assert odd == pytest.approx([0, 1 / 2, 0, 1 / 2, 0], abs=1e-14)


def rat_maze() -> np.ndarray:
    """Nine rooms, three by three; every door of a room is taken with the same chance."""
    doors = [[2, 4], [1, 3, 5], [2, 6], [1, 5, 7], [2, 4, 6, 8], [3, 5, 9], [4, 8], [5, 7, 9], [6, 8]]
    P = np.zeros((9, 9))
    for room, others in enumerate(doors):
        P[room, np.array(others) - 1] = 1 / len(others)
    return P


def test_c02d_rat_maze_stationary():
    # VERIFIED: Grinstead & Snell p. 441 and 453, in the tests of the octave queueing toolbox
    published = [1 / 12, 1 / 8, 1 / 12, 1 / 8, 1 / 6, 1 / 8, 1 / 12, 1 / 8, 1 / 12]
    assert stationary(rat_maze()).tolist() == pytest.approx(published, rel=1e-14)


def test_c02d_rat_maze_time_to_the_middle():
    assert mean_time_to(rat_maze(), [4]).tolist() == pytest.approx([6, 5, 6, 5, 0, 5, 6, 5, 6], rel=1e-14)


# Weather: sunny, cloudy, rain. VERIFIED: R markovchain vignette section 4
WEATHER = np.array([[0.7, 0.2, 0.1], [0.3, 0.4, 0.3], [0.2, 0.45, 0.35]])


def test_c02e_weather_stationary():
    assert stationary(WEATHER) == pytest.approx([0.4636364, 0.3181818, 0.2181818], **dp(7))


def test_c02e_weather_first_passage():
    published = np.array([[0, 4.285714, 6.666667], [3.725490, 0, 5], [4.117647, 2.857143, 0]])
    found = mean_first_passage(WEATHER)
    np.fill_diagonal(found, 0.0)
    assert found == pytest.approx(published, **dp(6))


def test_c02e_weather_recurrence():
    assert np.diag(mean_first_passage(WEATHER)) == pytest.approx([2.156863, 3.142857, 4.583333], **dp(6))


def test_c02e_weather_first_rain_on_day_three():
    assert first_passage_law(WEATHER, 2, steps=3)[2, 0] == pytest.approx(0.121, abs=1e-15)


def test_c02e_weather_rain_before_sun():
    assert hit_before(WEATHER, [2], [0])[1] == pytest.approx(0.5, rel=1e-15)


def ten_states() -> np.ndarray:
    """VERIFIED: R markovchain vignette sections 4.3-4.5, after Feres (2007); states a .. j."""
    P = np.zeros((10, 10))
    P[0, [0, 2]] = 1 / 2
    P[1, [1, 6]] = 1 / 3, 2 / 3
    P[2, 0] = P[3, 4] = P[5, 5] = P[8, 1] = 1.0
    P[4, [3, 4, 8]] = 1 / 3
    P[6, [6, 8]] = 1 / 4, 3 / 4
    P[7, [2, 3, 7, 9]] = 1 / 4
    P[9, [1, 4, 9]] = 1 / 3
    return P


def test_c03a_ten_states_classes():
    found = analyse(ten_states())
    assert found.closed == ((0, 2), (1, 6, 8), (5,))
    assert found.transient == (3, 4, 7, 9) and found.absorbing == (5,)
    assert {group for group in found.classes if group not in found.closed} == {(3, 4), (7,), (9,)}


def test_c03a_ten_states_recurrence():
    times = np.diag(mean_first_passage(ten_states()))
    published = {0: 1.5, 2: 3, 1: 2.555556, 6: 2.875, 8: 3.833333, 5: 1}
    for state, time in published.items():
        assert times[state] == pytest.approx(time, **dp(6))
    assert np.isinf(times[[3, 4, 7, 9]]).all()


def test_c03a_ten_states_where_h_ends():
    # recomputed for the check values: from h, 1/3 to {a, c} and 2/3 to {b, g, i}; it depends on the start
    limit = limit_matrix(ten_states())[7]
    assert limit[[0, 2]].sum() == pytest.approx(1 / 3) and limit[[1, 6, 8]].sum() == pytest.approx(2 / 3)
    assert analyse(ten_states()).verdict == "depends_on_start"


def test_c03a_ten_states_time_to_a_closed_class():
    # recomputed for the check values: d 5, e 4, h 25/6, j 3.5
    found = mean_time_to(ten_states(), [0, 1, 2, 5, 6, 8])
    assert found[[3, 4, 7, 9]].tolist() == pytest.approx([5, 4, 25 / 6, 3.5])


TWO_CLOSED = np.array([[0.5, 0.5, 0], [0.2, 0.8, 0], [0, 0, 1]])


def test_c03b_two_closed_classes_stationary_laws():
    # VERIFIED: docstrings of giddy 2.3.8 (markov.py)
    assert stationary_laws(TWO_CLOSED) == pytest.approx(np.array([[2 / 7, 5 / 7, 0], [0, 0, 1]]), rel=1e-15)


def test_c03b_two_closed_classes_first_passage():
    inf = math.inf
    published = np.array([[3.5, 2, inf], [5, 1.4, inf], [inf, inf, 1]])
    assert mean_first_passage(TWO_CLOSED) == pytest.approx(published, rel=1e-14)


PATH = np.array([[0, 1, 0, 0], [1 / 3, 0, 2 / 3, 0], [0, 1 / 4, 0, 3 / 4], [0, 0, 1, 0]])


def test_c03c_path_of_period_two():
    # VERIFIED: R markovchain vignette
    found = analyse(PATH)
    assert found.irreducible and found.periods == (2,)


def test_c03c_path_time_average():
    # recomputed for the check values: (1/18, 1/6, 4/9, 1/3)
    assert time_average_matrix(PATH) == pytest.approx(
        np.tile([1 / 18, 1 / 6, 4 / 9, 1 / 3], (4, 1)), rel=1e-13
    )


def test_c03c_seven_states_of_period_three():
    # VERIFIED: testPeriod.R of R markovchain, after D. Anderson's notes on stochastic processes
    P = np.zeros((7, 7))
    P[0, [2, 3, 4]] = 0.5, 0.25, 0.25
    P[1, [2, 4]] = 1 / 3, 2 / 3
    P[2, [5, 6]] = 1 / 3, 2 / 3
    P[3, [5, 6]] = 0.5, 0.5
    P[4, [5, 6]] = 0.75, 0.25
    P[5, [0, 1]] = 0.5, 0.5
    P[6, [0, 1]] = 0.25, 0.75
    found = analyse(P)
    assert found.irreducible and found.periods == (3,) and cycle_limits(P, 0).shape == (3, 7)


def test_c03c_cycle_of_three():
    assert analyse(np.roll(np.eye(3), 1, axis=1)).periods == (3,)


# C03d five states a .. e. The matrix is MEMORY (R markovchain vignette, after the Mathematica
# documentation); its closed classes are VERIFIED there, and the times and chances below, recomputed for
# the check values, agree with it.
FIVE = np.array(
    [
        [0, 1 / 3, 0, 2 / 3, 0],
        [1 / 2, 0, 0, 0, 1 / 2],
        [0, 0, 1 / 2, 1 / 2, 0],
        [0, 0, 1 / 2, 1 / 2, 0],
        [0, 0, 0, 0, 1],
    ]
)


def test_c03d_five_states_classes():
    found = analyse(FIVE)
    assert found.closed == ((2, 3), (4,)) and found.transient == (0, 1)


def test_c03d_five_states_time_and_end():
    assert mean_time_to(FIVE, [2, 3, 4])[:2].tolist() == pytest.approx([1.6, 1.8])
    limit = limit_matrix(FIVE)
    assert limit[0, [2, 3]].sum() == pytest.approx(0.8) and limit[0, 4] == pytest.approx(0.2)
    assert limit[1, [2, 3]].sum() == pytest.approx(0.4) and limit[1, 4] == pytest.approx(0.6)


# C04 recency ladder. Pfeifer & Carraway (2000), Journal of Interactive Marketing 14(2), 43-55. Structure
# VERIFIED, printed figures MEMORY (3 decimals), more decimals recomputed
LADDER = np.array(
    [[0.3, 0.7, 0, 0, 0], [0.2, 0, 0.8, 0, 0], [0.15, 0, 0, 0.85, 0], [0.05, 0, 0, 0, 0.95], [0, 0, 0, 0, 1]]
)
LADDER_REWARD = np.array([36.0, -4.0, -4.0, -4.0, 0.0])


@pytest.mark.parametrize("state", range(5))
def test_c04_ladder_value_over_four_periods(state):
    # the paper's four periods include t = 0: five cash flows
    printed = [50.115, 4.220, 0.592, -1.980, 0]
    recomputed = [50.11496914, 4.21990741, 0.59211034, -1.98013117, 0]
    found = horizon_value_derivative(LADDER, state, LADDER_REWARD, steps=5, discount=1 / 1.2).value[0]
    assert found == pytest.approx(printed[state], **dp(3))
    assert found == pytest.approx(recomputed[state], **dp(8))


def test_c04_ladder_value_for_ever():
    found = discounted_value_derivative(LADDER, LADDER_REWARD, discount=1 / 1.2).value
    assert found == pytest.approx([52.320, 5.554, 1.251, -1.820, 0], **dp(3))
    assert found == pytest.approx([52.31960944, 5.55378356, 1.25077299, -1.82001627, 0], **dp(8))


def receivables(Q: list[list[float]], R: list[list[float]]) -> np.ndarray:
    return np.vstack([np.hstack([Q, R]), np.hstack([np.zeros((2, 2)), np.eye(2)])])


# C05 receivables: two ages of debt, then paid or bad
UC = receivables([[0.5, 0.2], [0.3, 0.1]], [[0.3, 0], [0.5, 0.1]])
ASW = receivables([[0.3, 0.3], [0.3, 0.1]], [[0.4, 0], [0.4, 0.2]])
RS = receivables([[0.2, 0.2], [0.3, 0.2]], [[0.6, 0], [0.4, 0.1]])


def test_c05a_receivables_which_end():
    # VERIFIED: UC Limited, an accounting-examination exercise (essayravens.com); exact 37/39, 2/39, 34/39,
    # 5/39
    found = absorb(UC, [2, 3]).exit_probability
    assert found == pytest.approx(np.array([[0.95, 0.05], [0.87, 0.13]]), **dp(2))
    assert found == pytest.approx(np.array([[37, 2], [34, 5]]) / 39, rel=1e-14)


def test_c05a_receivables_amount_paid():
    found = absorb(UC, [2, 3]).exit_probability
    assert np.array([70_000, 30_000]) @ found[:, 0] == pytest.approx(92_564.10, **dp(2))


def test_c05b_receivables_visits_and_end():
    # MEMORY: Anderson, Sweeney & Williams, An Introduction to Management Science, chapter on Markov processes
    found = absorb(ASW, [2, 3])
    assert found.visits == pytest.approx(np.array([[1.67, 0.56], [0.56, 1.30]]), **dp(2))
    assert found.exit_probability == pytest.approx(np.array([[0.89, 0.11], [0.74, 0.26]]), **dp(2))


def test_c05b_receivables_amounts():
    found = np.array([1000, 2000]) @ absorb(ASW, [2, 3]).exit_probability
    assert found == pytest.approx([2370, 630], **dp(0))


def test_c05c_receivables_visits_and_end():
    # MEMORY: Render & Stair, Quantitative Analysis for Management, section 14.6
    found = absorb(RS, [2, 3])
    assert found.visits == pytest.approx(np.array([[1.38, 0.34], [0.52, 1.38]]), **dp(2))
    assert found.exit_probability == pytest.approx(np.array([[0.97, 0.03], [0.86, 0.14]]), **dp(2))


def test_c05c_receivables_amounts():
    # the book prints (6240, 760) because it rounds the chances first; exact (6241.38, 758.62)
    chance = absorb(RS, [2, 3]).exit_probability
    assert np.array([2000, 5000]) @ chance == pytest.approx([6241.38, 758.62], **dp(2))
    assert np.array([2000, 5000]) @ chance.round(2) == pytest.approx([6240, 760])


def bonus_malus() -> np.ndarray:
    """Five classes; claims a year are Poisson(.05). No claim: one class up; else down by the class's rule."""
    none, one = poisson(0.05).pmf([0, 1])
    P = np.zeros((5, 5))
    P[0, [0, 2, 4]] = none, one, 1 - none - one
    P[1, [0, 3, 4]] = none, one, 1 - none - one
    P[2, [1, 4]] = P[3, [2, 4]] = P[4, [3, 4]] = none, 1 - none
    return P


def test_c08_bonus_malus_stationary():
    # figures VERIFIED: R markovchain vignette section 6.3.1 after Denuit et al. (2007); the rules of the
    # classes MEMORY
    published = [0.895836079, 0.045930498, 0.048285405, 0.005969247, 0.003978772]
    assert stationary(bonus_malus()) == pytest.approx(published, **dp(9))


def test_c08_bonus_malus_mean_coefficient():
    assert stationary(bonus_malus()) @ [0.5, 0.7, 0.9, 1, 1.25] == pytest.approx(0.534469, **dp(6))


# C09 two-state reward. VERIFIED: R markovchain vignette section 6.2 after Bard (2000)
def test_c09_value_with_costs_of_moves():
    P, cost = np.array([[0.9, 0.1], [0.05, 0.95]]), np.array([[-20.0, -30.0], [-40.0, 0.0]])
    # the printed value at step 5 is the expected reward of that period alone: five periods less four
    five, four = (
        horizon_value_derivative(P, 0, [100.0, 0.0], steps=n, discount=1.0, move_reward=cost).value[0]
        for n in (6, 5)
    )
    assert five - four == pytest.approx(48.96009, **dp(5))


# C10 shares of two brands. VERIFIED: Beasley, OR-Notes, Markov processes
SHARES = np.array([[0.88, 0.12], [0.15, 0.85]])


def test_c10_shares_after_one_and_two_periods():
    start = np.array([0.25, 0.75])
    assert start @ SHARES == pytest.approx([0.3325, 0.6675], rel=1e-15)
    assert start @ SHARES @ SHARES == pytest.approx([0.392725, 0.607275], rel=1e-15)


def test_c10_shares_in_the_long_run():
    assert stationary(SHARES).tolist() == pytest.approx([5 / 9, 4 / 9], rel=1e-15)


# C24 CD4 counts, six months to one. Craig & Sendi (2002), Health Economics 11, 33-42; R markovchain
# vignette 6.5. Counts and six-month matrix VERIFIED; monthly root recomputed by scipy, R and mpmath (12
# decimals agree)
CD4 = np.array([[682.0, 33, 25], [154, 64, 47], [19, 19, 43]])
CD4 = CD4 / CD4.sum(axis=1, keepdims=True)


def test_c24_cd4_six_months():
    published = [
        [0.9216216, 0.04459459, 0.03378378],
        [0.5811321, 0.24150943, 0.17735849],
        [0.2345679, 0.2345679, 0.5308642],
    ]
    assert np.array(published) == pytest.approx(CD4, **dp(7))


def test_c24_cd4_one_month():
    recomputed = [
        [0.981901592574, 0.012197289849, 0.005901117577],
        [0.176576523490, 0.751704389666, 0.071719086844],
        [0.017703483243, 0.099285451394, 0.883011065363],
    ]
    found = root(CD4, 6)
    assert found.matrix == pytest.approx(np.array(recomputed), **dp(12))
    assert found.how == "generator" and found.residual < 1e-14


def test_c25a_dobrow_moves_within_two_and_a_half():
    # VERIFIED: Dobrow (2016), Introduction to Stochastic Processes with R, in testctmc.R of R markovchain
    G = np.diag([0.25] * 4, 1) + np.diag([0.2] * 4, -1)
    G -= np.diag(G.sum(axis=1))
    published = [
        [0.610, 0.290, 0.081, 0.016, 0.003],
        [0.232, 0.443, 0.238, 0.071, 0.017],
        [0.052, 0.190, 0.435, 0.238, 0.085],
        [0.008, 0.045, 0.191, 0.446, 0.310],
        [0.001, 0.008, 0.054, 0.248, 0.688],
    ]
    assert transition_matrix(G, 2.5) == pytest.approx(np.array(published), **dp(3))


def test_c25b_norris_time_to_the_end():
    # VERIFIED: Norris (1997), Markov Chains, in testctmc.R of R markovchain: 7 from state 1, 5.5 from state 2
    G = [[-1, 1 / 2, 1 / 2, 0], [1 / 4, -1 / 2, 0, 1 / 4], [1 / 6, 0, -1 / 3, 1 / 6], [0, 0, 0, 0]]
    found = mean_time_to_absorption(G, [3])
    assert found[0] == pytest.approx(7, rel=1e-14) and found[1] == pytest.approx(5.5, rel=1e-14)


def satellites(*, one_launch: bool = False) -> np.ndarray:
    """Tijms (2003), A First Course in Stochastic Models, p. 172. VERIFIED: octave queueing toolbox, tests.

    States 0 .. 5: one to six satellites; 6, 7: two or one left, a shuttle being prepared; 8: system down.
    """
    fail, decide, replace = 0.1, 100.0, 5.0
    G = np.zeros((9, 9))
    for working in range(6, 1, -1):
        G[working - 1, working - 2] = working * fail
    G[1, 6], G[0, 8], G[0, 7] = decide, fail, decide
    if not one_launch:
        G[7, 8], G[6, 7], G[6, 5], G[7, 5] = fail, 2 * fail, replace, replace
    return G - np.diag(G.sum(axis=1))


def test_c25c_tijms_down_within_ten_years():
    assert transition_matrix(satellites(), 10)[5, 8] == pytest.approx(0.000504, **dp(6))


def test_c25c_tijms_occupancy_at_two_years():
    published = [3.83e-7, 1.938e-4, 0.0654032, 0.2216998, 0.4016008, 0.3079701, 0.0030271, 0.0000998, 5e-6]
    assert transition_matrix(satellites(), 2)[5] == pytest.approx(published, abs=5e-7)


def test_c25c_tijms_no_launch_within_ten_years():
    found = transition_matrix(satellites(one_launch=True), 10)[5]
    assert 1 - found[6:].sum() == pytest.approx(0.3901, **dp(4))


# C25d Bolch et al., Queueing Networks and Markov Chains. VERIFIED: tests of the octave queueing toolbox
def test_c25d_bolch_example_3_1():
    G = [[-1, 1, 0, 0], [2, -3, 1, 0], [0, 2, -3, 1], [0, 0, 2, -2]]
    assert stationary_of_rates(G).tolist() == pytest.approx([8 / 15, 4 / 15, 2 / 15, 1 / 15], rel=1e-15)


def test_c25d_bolch_example_3_2():
    G = np.zeros((7, 7))
    for origin, target, rate in [
        (0, 1, 1), (1, 2, 1), (1, 4, 2), (2, 3, 1), (2, 5, 2), (3, 6, 2),
        (4, 0, 2), (4, 5, 1), (5, 1, 2), (5, 6, 1), (6, 2, 2),
    ]:  # fmt: skip
        G[origin, target] = rate
    G -= np.diag(G.sum(axis=1))
    published = [0.2192, 0.1644, 0.1507, 0.0753, 0.1096, 0.1370, 0.1438]
    assert stationary_of_rates(G) == pytest.approx(published, **dp(4))


def test_c25d_bolch_example_3_4():
    G = [
        [-1, 0.4, 0.6, 0, 0, 0],
        [2, -3, 0, 0.4, 0.6, 0],
        [3, 0, -4, 0, 0.4, 0.6],
        [0, 2, 0, -2, 0, 0],
        [0, 3, 2, 0, -5, 0],
        [0, 0, 3, 0, 0, -3],
    ]
    # printed cut off, not rounded: .6578 for .65789, .1315 for .13158
    printed = [0.6578, 0.1315, 0.1315, 0.0263, 0.0263, 0.0263]
    assert np.floor(stationary_of_rates(G) * 1e4) / 1e4 == pytest.approx(printed, abs=1e-12)


def test_c25_heimann_mean_time_between_failures():
    # VERIFIED: Heimann, Mittal & Trivedi (1989), Availability and Reliability Modeling for Computer
    # Systems, section 2.4, in the tests of the octave queueing toolbox: 24,857 hours; rates per second
    reboot, switch, fail, mend, covered = 1 / 600, 1 / 30, 1 / 18e6, 1 / 14400, 0.9
    G = np.zeros((5, 5))
    G[0, [1, 2]] = 2 * covered * fail, 2 * (1 - covered) * fail
    G[1, 3], G[2, 3], G[3, [0, 4]], G[4, 3] = switch, reboot, (mend, fail), mend
    G -= np.diag(G.sum(axis=1))
    published = [0.9983916, 0.000002995, 0.0000066559, 0.00159742, 0.0000012779]
    assert stationary_of_rates(G) == pytest.approx(published, abs=5e-7)
    assert int(mean_time_to_absorption(G, [2, 4])[0] / 3600) == 24857


# C26 the walk on 0 .. n killed at its ends: lambda = cos(pi/n), u_i ~ sin(i pi/n). MEMORY (closed form):
# Darroch & Seneta (1965), Journal of Applied Probability 2, 88-100
@pytest.mark.parametrize("n", [3, 4, 7, 20])
def test_c26_walk_remaining_mix(n):
    Q = walk(n)[1:n, 1:n]
    found = remaining(Q)
    law = np.sin(np.arange(1, n) * math.pi / n)
    assert found.retention == pytest.approx(math.cos(math.pi / n), rel=1e-14)
    assert found.mix == pytest.approx(law / law.sum(), rel=1e-13)
    assert found.code == "periodic"  # the walk alternates between odd and even places


def test_c26_walk_of_four_as_printed():
    found = remaining(walk(4)[1:4, 1:4])
    assert found.retention == pytest.approx(0.70710678, **dp(8))
    assert found.mix == pytest.approx([0.29289322, 0.41421356, 0.29289322], **dp(8))
    assert found.mix @ absorb(walk(4), [0, 4]).mean_time == pytest.approx(3.41421356, **dp(8))


def test_c26_ladder_remaining_mix():
    # recomputed for the check values, on the ladder of C04
    found = remaining(LADDER[:4, :4])
    assert found.retention == pytest.approx(0.720123920581, **dp(12))
    assert found.mix == pytest.approx(
        [0.231130327849, 0.224671372343, 0.249591900419, 0.294606399389], **dp(12)
    )
    assert found.code == "exists"


def whale() -> np.ndarray:
    """Killer whale: yearling, juvenile, mature, post-reproductive, dead. The source has column = from.

    VERIFIED inputs: Brault & Caswell (1993), Ecology 74, 1444-1454; Caswell (2001), Matrix Population Models,
    example 5.1. Outputs of popbio 2.8 (`fundamental.matrix`) run in R; the book's own were not seen.
    """
    U = np.array([[0, 0, 0, 0], [0.9775, 0.9111, 0, 0], [0, 0.0736, 0.9534, 0], [0, 0, 0.0452, 0.9804]]).T
    return np.vstack([np.column_stack([U, 1 - U.sum(axis=1)]), np.eye(5)[4]])


def test_c27_whale_visits():
    printed = [
        [1, 0, 0, 0],
        [10.995501, 11.248594, 0, 0],
        [17.366284, 17.766020, 21.459227, 0],
        [40.048778, 40.970617, 49.487606, 51.020408],
    ]
    assert absorb(whale(), [4]).visits == pytest.approx(np.array(printed).T, **dp(6))


def test_c27_whale_mean_life():
    assert absorb(whale(), [4]).mean_time == pytest.approx(
        [69.410562, 69.985230, 70.946834, 51.020408], **dp(6)
    )


def test_c27_whale_variance_of_life():
    assert absorb(whale(), [4]).variance_time == pytest.approx(
        [3341.4054, 3308.1140, 2990.2842, 2552.0616], **dp(4)
    )


def test_c27_whale_sensitivities():
    # Caswell (2013), Linear Algebra Appl. 438: d eta / d vec U = N' (x) eta', with columns = from
    N = absorb(whale(), [4]).visits
    eta = absorb(whale(), [4]).mean_time
    found = exit_time_derivative(whale(), [4]).full()[:, :4, :4]
    kronecker = np.kron(N, eta[None, :])  # rows: start; columns: (from, to)
    assert found == pytest.approx(kronecker.reshape(4, 4, 4), rel=1e-12)


def test_c27_whale_elasticities_of_yearling_life():
    # the elasticities of the life expectancy of yearlings sum to 58.2751436... over the whole of U;
    # checked below
    P = whale()
    slope, life = exit_time_derivative(P, [4]).gradient(0)[:4, :4], absorb(P, [4]).mean_time[0]
    assert (slope * P[:4, :4]).sum() / life == pytest.approx(58.2751436, **dp(7))


def test_c29_unemployment_chain():
    # MEMORY: Hamilton (2005), Federal Reserve Bank of St. Louis Review 87(4), 435-452
    P = np.array([[0.971, 0.029, 0], [0.145, 0.778, 0.077], [0, 0.508, 0.492]])
    exact = np.array([0.145 * 0.508, 0.029 * 0.508, 0.029 * 0.077])  # detailed balance along the line
    assert stationary(P) == pytest.approx([0.8128, 0.16256, 0.02464], **dp(4))
    assert stationary(P) == pytest.approx(exact / exact.sum(), rel=1e-14)


def test_time_spent_adds_up_to_the_horizon():
    # Tijms' satellites again: time in each state within two years, by the identity d O / dt = P(t)
    G, h = satellites(), 1e-4
    slope = (occupation_times(G, 2 + h) - occupation_times(G, 2 - h)) / (2 * h)
    assert slope[5] == pytest.approx(transition_matrix(G, 2)[5], abs=1e-7)
    assert occupation_times(G, 2)[5].sum() == pytest.approx(2, rel=1e-12)
