"""Observed amounts: means on paper, their error against clustered regression, refusals."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector.amounts import observed_amounts
from cohortflow.projector.value import value
from cohortflow.tally import Tally
from tests.projector_cases import CHAIN, STATES, tally_of_stays

# bucket, period, state, customers, pounds, in pence below
ROWS = [(0, 1, 0, 1, 4.0), (0, 2, 1, 1, 30.0), (0, 3, 1, 1, 20.0), (1, 2, 1, 1, 10.0), (2, 3, 1, 1, 24.0),
        (2, 2, 0, 1, 8.0), (1, 3, 3, 1, 6.0)]  # fmt: skip


def tally(rows=ROWS):
    counted = tally_of_stays([("joined", "", [(p, "steady") for p in range(1, 4)])] * 3, last=3)
    table = pd.DataFrame(rows, columns=["bucket", "period", "state", "n", "pounds"])
    table = table.assign(segment=0, total=(table["pounds"] * 100).astype(int), squares=0)
    return Tally.build(counted.meta, {**counted.tables, "amounts": table.drop(columns="pounds")})


def test_means_on_paper():
    found = observed_amounts(tally(), margin=0.5)
    # fresh (4 + 8)/2, steady (30 + 20 + 10 + 24)/4 = 21, the exit 6, all halved; nobody seen paused
    np.testing.assert_allclose(found.mean, [3, 10.5, np.nan, 3, np.nan])
    assert found.number.tolist() == [2, 4, 0, 1, 0] and found.about() == {"margin": 0.5}
    last = observed_amounts(tally(), window=1)
    np.testing.assert_allclose(last.mean, [np.nan, 22, np.nan, 6, np.nan])
    assert "contribution a customer a period, 5 states, margin 1" in repr(last)


def test_error_is_that_of_a_clustered_regression():
    # independent implementation: OLS of the amount on a constant with errors clustered by bucket, without the
    # small-sample factor (n-1)/(n-k) that statsmodels adds for the regressors
    rows = [r for r in ROWS if r[2] == 1]
    amounts, groups = np.array([r[4] for r in rows]), np.array([r[0] for r in rows])
    fitted = sm.OLS(amounts, np.ones(4)).fit(
        cov_type="cluster", cov_kwds={"groups": groups, "use_correction": False}
    )
    found = observed_amounts(tally()).to_frame().set_index("state").loc["steady", "std_error"]
    assert found == pytest.approx(fitted.bse[0] * np.sqrt(3 / 2))  # G/(G-1), three buckets


def test_the_last_payment_of_a_leaver_counts_once():
    # everybody steady, stays with .9, pays 10 a period and 6 in the period of leaving
    amounts = observed_amounts(
        tally([(0, 1, 1, 1, 10.0), (1, 1, 1, 1, 10.0), (0, 2, 3, 1, 6.0), (1, 2, 4, 1, 6.0)])
    )
    found = value(CHAIN, per_period=amounts, timing="end", start={"steady": 1})
    # steady for 60/7 periods in all, the first of which is paid already; then once 6
    assert found.customer[1] == pytest.approx(10 * (60 / 7 - 1) + 6)


def test_their_error_widens_the_interval():
    from tests.projector_cases import P, multinomial

    amounts = observed_amounts(tally())
    options = {"timing": "start", "covariance": multinomial(P, 800)}
    plain = value(CHAIN, per_period=np.nan_to_num(amounts.mean) * ~STATES.exit_mask, **options)
    wide = value(CHAIN, per_period=amounts, **options)
    key = ("customer_value", "steady")
    assert wide.customer[1] == pytest.approx(plain.customer[1])
    # on the log scale the squared half-widths differ by (z x relative error of the amount)^2: steady pays all
    gain = np.diff([np.log(v.limits[key][1] / v.customer[1]) ** 2 for v in (plain, wide)])[0]
    relative = np.sqrt(amounts.covariance[1, 1]) / amounts.mean[1]
    assert gain == pytest.approx((1.6448536 * relative) ** 2, rel=1e-6)


def test_refusals():
    with pytest.raises(CallError, match="margin is 0; it is the share of the amounts that counts, above 0"):
        observed_amounts(tally(), margin=0)
    without = tally()
    bare = Tally(replace(without.meta, tables=("moves", "starts")), without.tables)
    with pytest.raises(NotIdentified, match='do not hold the table "amounts"'):
        observed_amounts(bare)
    with pytest.raises(CallError, match="a bare Chain has none. Give amounts by state"):
        value(CHAIN, per_period="observed")
