"""RowCounts: sums, shares, weights."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.estimator.rows import RowCounts


def table():
    # row 0: 3 moves to 0 and 1 to 1 in period 0; 1 to 1 in period 1 (bucket 7). Row 1: nothing.
    return pd.DataFrame(
        {
            "row": [0, 0, 0, 0],
            "column": [0, 0, 1, 1],
            "bucket": [5, 7, 5, 7],
            "period": [0, 0, 0, 1],
            "n": [2, 1, 1, 1],
        }
    )


def test_counts_shares_and_rows_without_departures():
    rows = RowCounts.of_table(table(), np.ones((2, 2), bool), np.ones(4))
    assert rows.N.tolist() == [[3, 2], [0, 0]]
    assert rows.P[0].tolist() == [0.6, 0.4] and np.isnan(rows.P[1]).all()
    assert rows.at_risk.tolist() == rows.effective.tolist() == [5, 0]


def test_weights_act_on_counts_and_the_effective_number_is_kishs():
    rows = RowCounts.of_table(table(), np.ones((2, 2), bool), np.array([0.5, 0.5, 0.5, 1.0]))
    # weighted: 1.5 and .5 + 1; total 3. Kish: 3^2 / (4 x .25 + 1) = 4.5
    assert rows.N[0].tolist() == [1.5, 1.5]
    assert rows.effective[0] == pytest.approx(4.5)
    periods, cube = rows.by_period()
    assert periods.tolist() == [0, 1] and cube[:, 0].tolist() == [[3, 1], [0, 1]]
    assert rows.by_period(weighted=True)[1][0, 0].tolist() == [1.5, 0.5]


def test_groups():
    rows = RowCounts.of_table(table(), np.ones((2, 2), bool), np.ones(4))
    # entries in key order: (0,0,5,0) (0,0,7,0) (0,1,5,0) (0,1,7,1)
    assert rows.groups("bucket").tolist() == [0, 1, 0, 1]
    assert rows.groups("period").tolist() == [0, 0, 0, 1]
    assert rows.groups("bucket x period").tolist() == [0, 1, 0, 2]


def test_a_matrix_of_counts():
    rows = RowCounts.of_matrix([[8, 2], [0, 0]])
    assert rows.N.tolist() == [[8, 2], [0, 0]] and rows.shape == (2, 2)
