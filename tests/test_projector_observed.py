"""The observed curve against statsmodels, its interval, the cohort triangle on paper."""

import numpy as np
import pytest
from statsmodels.duration.survfunc import SurvfuncRight

from cohortflow.projector.observed import cohort_table, observed_retention
from tests.projector_cases import (
    tally_of_stays,
)


def stay(begin, length, leaves=True, last=6):
    """Joined in `begin`, seen for `length` periods, then left (or still there at the end)."""
    rows = [(p, "steady") for p in range(begin, min(begin + length, last + 1))]
    return ("joined", "", [*rows, (begin + length, "left")] if leaves and begin + length <= last else rows)


STAYS = [
    stay(1, 9),
    stay(1, 2),
    stay(1, 4),
    stay(2, 1),
    stay(2, 9),
    stay(3, 2),
    stay(4, 9),
    stay(5, 1),
    stay(6, 1),
]


def test_observed_curve_is_the_product_limit():
    tally = tally_of_stays(STAYS)
    found = observed_retention(tally)
    # independent implementation: statsmodels' product limit on (periods until leaving, left or still there)
    time = np.array([5, 2, 4, 1, 4, 2, 2, 1, 0])
    left = np.array([0, 1, 1, 1, 0, 1, 0, 1, 0])
    theirs = SurvfuncRight(time, left)
    for at, share in zip(theirs.surv_times, theirs.surv_prob, strict=True):
        assert found.share[int(at)] == pytest.approx(share)
    # at risk of leaving at age 1: all who joined by period 5; left at age 1: two
    assert found.at_risk.tolist() == [9, 8, 6, 3, 3, 1] and found.left.tolist() == [0, 2, 2, 0, 1, 0]
    np.testing.assert_allclose(found.share, [1, 6 / 8, 6 / 8 * 4 / 6, 0.5, 0.5 * 2 / 3, 1 / 3])


def test_interval_uses_the_effective_number():
    found = observed_retention(tally_of_stays(STAYS), level=0.95)
    theirs = SurvfuncRight(np.array([5, 2, 4, 1, 4, 2, 2, 1, 0]), np.array([0, 1, 1, 1, 0, 1, 0, 1, 0]))
    # Greenwood's error at age 2 (statsmodels), then Wilson with n = S(1-S)/se^2 (Rothman 1978)
    error = theirs.surv_prob_se[list(theirs.surv_times).index(2)]
    number, z = 0.25 / error**2, 1.959963984540054
    centre, half = 0.5, z * np.sqrt(0.25 / number + z**2 / (4 * number**2)) / (1 + z**2 / number)
    assert (found.low[2], found.high[2]) == pytest.approx((centre - half, centre + half))
    nobody_left = observed_retention(tally_of_stays([stay(1, 9)] * 10))
    # nobody of ten left: not certain for ever; Wilson's lower limit n/(n+z^2) at level .9
    assert nobody_left.share[5] == 1 and nobody_left.low[5] == pytest.approx(10 / (10 + 1.6448536**2))
    assert nobody_left.high[5] == 1


def test_immature_ages_are_marked():
    found = observed_retention(tally_of_stays(STAYS))
    # nine joined in periods 1 1 1 2 2 3 4 5 6: old enough for age 3 are the six of periods 1 to 3
    np.testing.assert_allclose(found.exposure, [1, 8 / 9, 7 / 9, 6 / 9, 5 / 9, 3 / 9])
    assert found.immature.tolist() == [False] * 5 + [True]


def test_cohort_triangle_on_paper():
    frame = cohort_table(tally_of_stays(STAYS))
    first = frame[frame["joined"] == "1"]
    assert first["size"].tolist() == [3] * 6 and first["live"].tolist() == [3, 3, 2, 2, 1, 1]
    assert first["lost"].tolist() == [0, 0, 1, 1, 2, 2] and first["complete"].all()
    fifth = frame[frame["joined"] == "5"]
    assert fifth["complete"].tolist() == [True, True] + [False] * 4
    assert fifth["live"].tolist()[:2] == [1, 0] and fifth["live"].isna().sum() == 4
