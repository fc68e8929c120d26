"""Independence in sets of tables: by hand, against scipy, and the law of random tables."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.stats import chi2_contingency

from cohortflow.assessment.tables import (
    Stratified,
    against,
    chi_square_tail,
    identified_df,
    independence,
    likelihood_ratio,
    tail_share,
)
from cohortflow.errors import CallError

TABLES = arrays(
    int, st.tuples(st.integers(1, 4), st.integers(1, 4), st.integers(1, 4)), elements=st.integers(0, 9)
)


def test_by_hand():
    # rows 30, 70; columns 40, 60; expected 12 18 / 28 42; each 8 off: X2 = 64 (1/12 + 1/18 + 1/28 + 1/42)
    found = independence([[20, 10], [20, 50]])
    assert found.x2 == pytest.approx(64 * (1 / 12 + 1 / 18 + 1 / 28 + 1 / 42), rel=1e-12)
    # 2 (20 log 20/12 + 10 log 10/18 + 20 log 20/28 + 50 log 50/42)
    by_hand = 2 * (20 * np.log(20 / 12) + 10 * np.log(10 / 18) + 20 * np.log(20 / 28) + 50 * np.log(50 / 42))
    assert (found.lr, found.df, found.full_df) == (pytest.approx(by_hand, rel=1e-12), 1, 1)


@settings(deadline=None, max_examples=60)
@given(TABLES)
def test_agrees_with_scipy_table_by_table(tables):
    lr = x2 = 0.0
    df = 0
    for table in tables:
        kept = table[table.any(axis=1)][:, table.any(axis=0)]
        if min(kept.shape, default=0) < 2:
            continue
        g = chi2_contingency(kept, lambda_="log-likelihood", correction=False)
        lr, x2, df = lr + g.statistic, x2 + chi2_contingency(kept, correction=False).statistic, df + g.dof
    found = independence(tables)
    assert found.lr == pytest.approx(lr, abs=1e-9)
    assert found.x2 == pytest.approx(x2, abs=1e-9)
    assert found.df == df == identified_df(tables)


def test_structural_zeros_and_empty_rows_take_degrees_of_freedom_away():
    # rows that were seen: 2 of 3; columns that were seen: 3 of 4: (2 - 1)(3 - 1) = 2, not 2 x 3 = 6
    assert independence([[5, 1, 0, 2], [0, 0, 0, 0], [3, 3, 0, 1]]).df == 2


def test_nothing_to_test_has_no_p_value():
    found = independence([[5, 1, 0]])
    assert (found.lr, found.df) == (0.0, 0)
    assert np.isnan(found.p_lr) and np.isnan(found.p_x2)


def test_a_count_where_nothing_is_allowed_rejects_outright():
    found = against([[5, 1]], [[1.0, 0.0]])
    assert (found.lr, found.x2, found.df) == (np.inf, np.inf, 0)


def test_against_leaves_out_rows_without_counts():
    # one row of two cells: df 1; the empty row adds none
    assert against([[6, 4], [0, 0]], [[0.5, 0.5], [0.2, 0.8]]).df == 1


@pytest.mark.parametrize("counts", [[1, 2], [[[[1]]]], [[-1, 2], [3, 4]]])
def test_refuses_what_is_no_table(counts):
    with pytest.raises(CallError, match="Independence is tested in tables of counts"):
        independence(counts)


@pytest.mark.parametrize("p", [[[0.5, 0.4]], [[0.5, 0.5], [1.0, 0.0]]])
def test_against_refuses_what_is_no_law(p):
    with pytest.raises(CallError, match="each row of the latter adding up to 1"):
        against([[1, 2]], p)


def test_chi_square_tail_at_its_published_points():
    # 5 % points of the chi-square law: 3.8415 (1), 18.307 (10) (any table of it)
    assert chi_square_tail(3.8415, 1) == pytest.approx(0.05, abs=2e-6)
    assert chi_square_tail(18.307, 10) == pytest.approx(0.05, abs=2e-6)


def test_tail_share_counts_ties():
    # 2 of 4 draws at least 3, counting the tie; (1 + 2) / (1 + 4)
    assert tail_share(3.0, np.array([3.0 + 1e-12, 5.0, 1.0, 0.0])) == pytest.approx(3 / 5)


def stratified(cells):
    """Stratified counts from a (G, S, R, C) array."""
    table, stratum, row, column = np.nonzero(cells)
    shape = (cells.shape[0], *cells.shape[2:])
    return Stratified(table, stratum, row, column, cells[table, stratum, row, column], shape)


def test_pooled_adds_the_strata():
    cells = np.arange(24).reshape(1, 2, 3, 4)
    assert stratified(cells).pooled().tolist() == (cells[:, 0] + cells[:, 1]).tolist()


def test_random_tables_keep_margins_and_have_the_chi_square_mean():
    # E of LR under independence is near its df for large counts: 4 x 3 tables, df 6; mean of 400 +- 4 sd
    cells = np.random.default_rng(0).multinomial(
        4000, np.outer([0.1, 0.2, 0.3, 0.4], [0.5, 0.3, 0.2]).ravel()
    )
    drawn = stratified(cells.reshape(1, 1, 4, 3)).drawn(400, np.random.default_rng(1))
    assert drawn.mean() == pytest.approx(6, abs=4 * np.sqrt(12 / 400))


def test_a_common_shift_of_the_strata_is_not_taken_for_dependence():
    # in each stratum rows and columns are independent, yet both shares move: pooled they look dependent
    one = np.round(1000 * np.outer([0.9, 0.1], [0.9, 0.1])).astype(int)
    two = np.round(1000 * np.outer([0.1, 0.9], [0.1, 0.9])).astype(int)
    counts = stratified(np.stack([one, two])[None])
    statistic = likelihood_ratio(counts.pooled())
    assert chi_square_tail(float(statistic), 1) < 1e-12
    drawn = counts.drawn(199, np.random.default_rng(2))
    assert 0.01 < tail_share(float(statistic), drawn) < 0.99


def test_strata_with_one_row_do_not_vary():
    cells = np.array([[[[3, 4], [0, 0]], [[0, 0], [2, 2]]]])
    drawn = stratified(cells).drawn(5, np.random.default_rng(1))
    assert np.ptp(drawn) == 0
