"""Covariances: a hand case, statsmodels, the jackknife, and periods."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.covariance import clipped, covariance, design_effects
from cohortflow.estimator.rows import RowCounts


def rows_of(moves, states=2, weights=None):
    """RowCounts of (customer, period, from, to) moves."""
    table = pd.DataFrame(moves, columns=["bucket", "period", "row", "column"]).assign(n=1)
    table["bucket"] = pd.factorize(table["bucket"])[0]
    weight = np.ones(len(table)) if weights is None else np.asarray(weights, float)
    return RowCounts.of_table(table, np.ones((states, states), bool), weight)


def test_by_hand_three_customers_two_states():
    # customers: A moves 0-0, 0-1; B moves 0-0; C moves 1-0, 0-0, 1-1 is not seen, so:
    # N_00 = 3, N_01 = 1, n_0 = 4, p_00 = 3/4; N_10 = 1, n_1 = 1, p_10 = 1.
    # scores s_c00 = N_c00 - 3/4 N_c0. : A 1 - 3/2 = -1/2; B 1 - 3/4 = 1/4; C 1/4. Sum of squares
    # 1/4+1/16+1/16 = 3/8
    # V_00,00 = 3/2 x (3/8) / 4^2 = 9/256; with p_01 of opposite sign; row 1 has no spread.
    rows = rows_of([("A", 0, 0, 0), ("A", 1, 0, 1), ("B", 0, 0, 0), ("C", 0, 1, 0), ("C", 1, 0, 0)])
    cov = covariance(rows, "customer")
    expected = np.zeros((4, 4))
    expected[:2, :2] = 9 / 256 * np.array([[1, -1], [-1, 1]])
    assert np.allclose(cov.matrix, expected, atol=1e-15)
    assert cov.df == 2 and cov.groups == {"buckets": 3}
    # multinomial: 3/4 x 1/4 / 4 = 3/64; design effect (9/256)/(3/64) = 3/4
    assert covariance(rows, "multinomial").variance[0, 0] == pytest.approx(3 / 64)
    assert design_effects(rows, cov)[0].tolist() == pytest.approx([0.75, 0.75])


def simulated(customers=60, periods=9, states=3, seed=4):
    rng = np.random.default_rng(seed)
    moves, weights = [], []
    for c in range(customers):
        P = rng.dirichlet(np.ones(states) * 2, size=states)
        state = int(rng.integers(states))
        for t in range(int(rng.integers(2, periods))):
            following = int(rng.choice(states, p=P[state]))
            moves.append((c, t, state, following))
            weights.append(0.5 ** ((periods - t) / 6))
            state = following
    return moves, weights


@pytest.mark.parametrize("weighted", [False, True])
def test_equals_statsmodels_clustered_least_squares(weighted):
    """Destination indicators on origin dummies, clustered by customer, no degrees-of-freedom factor."""
    moves, weights = simulated()
    rows = rows_of(moves, 3, weights if weighted else None)
    cov = covariance(rows, "customer")
    customer, _, origin, target = (np.array(v) for v in zip(*moves, strict=True))
    groups = len(np.unique(customer))
    X = np.eye(3)[origin]
    for j in range(3):
        y = (target == j).astype(float)
        model = sm.WLS(y, X, weights=np.array(weights) if weighted else np.ones(len(y)))
        result = model.fit(cov_type="cluster", cov_kwds={"groups": customer, "use_correction": False})
        ours = cov.matrix[j::3, j::3]
        assert np.allclose(ours, result.cov_params() * groups / (groups - 1), atol=1e-12, rtol=1e-12)


def test_statsmodels_two_way_when_the_periods_carry_equal_numbers():
    """Same customers in the same periods: V_customer + V_period - V_both as statsmodels' two-way clusters,
    apart from its small-sample factors (G/(G-1) each)."""
    rng = np.random.default_rng(2)
    moves = [(c, t, 0, int(rng.random() < 0.2 + 0.05 * t)) for c in range(40) for t in range(8)]
    ours = covariance(rows_of(moves), "two_way").variance[0, 1]
    y = np.array([m[3] for m in moves], float)
    groups = np.array([[m[0], m[1]] for m in moves])
    one = {g: sm.OLS(y, np.ones((len(y), 1))).fit(
        cov_type="cluster", cov_kwds={"groups": groups[:, g], "use_correction": False}).cov_params()[0, 0]
        for g in (0, 1)}  # fmt: skip
    both = sm.OLS(y, np.ones((len(y), 1))).fit(cov_type="HC0").cov_params()[0, 0]
    expected = one[0] * 40 / 39 + one[1] * 8 / 7 - both * 320 / 319
    assert ours == pytest.approx(expected, rel=1e-10)
    assert covariance(rows_of(moves), "two_way").df == 7


def test_delete_one_customer_agrees_within_some_per_cent():
    moves, _ = simulated(customers=120, seed=9)
    rows = rows_of(moves, 3)
    robust = covariance(rows, "customer").variance
    counts = np.zeros((120, 3, 3))
    for c, _, i, j in moves:
        counts[c, i, j] += 1
    left_out = counts.sum(axis=0) - counts
    P = left_out / left_out.sum(axis=2, keepdims=True)
    jackknife = 119 / 120 * ((P - P.mean(axis=0)) ** 2).sum(axis=0)
    assert np.allclose(robust, jackknife, rtol=0.08)


def test_buckets_of_many_customers_estimate_the_same_thing():
    # 4,000 customers in 128 buckets against one bucket each: sd of a variance estimate with 127 df is about
    # 12.5 %
    moves, _ = simulated(customers=4000, seed=1)
    fine = covariance(rows_of(moves, 3), "customer")
    coarse = covariance(rows_of([(c % 128, t, i, j) for c, t, i, j in moves], 3), "customer")
    assert coarse.df == 127 and np.all(np.abs(coarse.variance / fine.variance - 1) < 0.45)
    # Student's t with 127 df at 95 % is 1.9788 against 1.96: level 95.22 %
    assert coarse.level_for(0.95) == pytest.approx(0.95217, abs=5e-5)


def test_a_shock_shared_by_a_period_shows_in_the_two_way_form_only():
    # 2,000 customers, 12 periods, exit share .10 in even and .20 in odd periods: between-period variance
    # .05^2
    rng = np.random.default_rng(3)
    moves = [(c, t, 0, int(rng.random() < 0.1 + 0.1 * (t % 2))) for c in range(2000) for t in range(12)]
    rows = rows_of(moves)
    customer, two_way = covariance(rows, "customer"), covariance(rows, "two_way")
    assert customer.std_error[0, 1] < 0.0035
    # var of a mean of 12 with variance .0025 x 12/11 (sample): .0025/11 = .0151^2
    assert two_way.std_error[0, 1] == pytest.approx(0.0151, rel=0.1)


def test_a_row_seen_in_one_period_keeps_the_customer_form_and_says_so():
    rng = np.random.default_rng(5)
    moves = [(c, 0, 0, int(rng.random() < 0.5)) for c in range(50)]
    moves += [(c, t, 1, int(rng.random() < 0.8)) for c in range(50) for t in range(1, 6)]
    rows = rows_of(moves)
    two_way = covariance(rows, "two_way", row_names=("fresh", "steady"))
    assert two_way.notes == ("one_period_only:fresh",)
    assert np.allclose(two_way.matrix[:2, :2], covariance(rows, "customer").matrix[:2, :2])


def test_rows_sum_to_zero_and_the_matrix_is_positive_semidefinite():
    moves, weights = simulated()
    for kind in ("multinomial", "customer", "two_way"):
        cov = covariance(rows_of(moves, 3, weights), kind)
        assert np.allclose(cov.matrix.reshape(9, 3, 3).sum(axis=2), 0, atol=1e-14)
        assert np.linalg.eigvalsh(cov.matrix)[0] > -1e-12


def test_rows_without_data_are_nan_and_floors_hold():
    rows = rows_of([("A", 0, 0, 0), ("B", 0, 0, 1), ("C", 0, 0, 1)])
    cov = covariance(rows, "customer")
    assert np.isnan(cov.matrix[2:]).all() and np.isfinite(cov.matrix[:2, :2]).all()
    assert np.isnan(design_effects(rows, cov)[1]).all()
    # A and B always do the opposite of each other in both of two periods: the row's score is 0 for everyone
    even = rows_of([(c, t, 0, (t + c) % 2) for c in range(4) for t in range(2)])
    assert design_effects(even, covariance(even, "customer")).tolist()[0] == [0.25, 0.25]


def test_a_level_stays_below_one_with_a_single_degree_of_freedom():
    # Student's quantile for 99 % with 1 df is 63.7: as a normal quantile its level is 1 in double precision
    cov = covariance(rows_of([("A", 0, 0, 0), ("B", 0, 0, 1)]), "customer")
    assert cov.df == 1 and 0.999 < cov.level_for(0.99) < 1


def test_frame_and_clipping():
    cov = covariance(
        rows_of([("A", 0, 0, 0), ("B", 0, 0, 1)]),
        "multinomial",
        row_names=("a", "b"),
        column_names=("a", "b"),
    )
    frame = cov.to_frame()
    assert len(frame) == 16 and frame.loc[1, ["from", "to", "from_2", "to_2"]].tolist() == [
        "a",
        "a",
        "a",
        "b",
    ]
    # [[0, 1], [1, 0]] has eigenvalues 1 and -1; without the second it is [[.5, .5], [.5, .5]]
    assert np.allclose(clipped(np.array([[0.0, 1.0], [1.0, 0.0]])), 0.5)


def test_refusals():
    rows = RowCounts.of_matrix([[8, 2], [1, 5]])
    with pytest.raises(CallError, match=r'Unknown covariance "twoway" \(did you mean "two_way"'):
        covariance(rows, "twoway")
    with pytest.raises(NotIdentified, match="these counts have 1"):
        covariance(rows, "customer")
