"""Retention: model curves by hand, the observed curve against statsmodels, the cohort triangle on paper."""

from types import SimpleNamespace

import numpy as np
import pytest
from statsmodels.duration.survfunc import SurvfuncRight

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector.retention import cohort_table, entry_mix, observed_retention, retention
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    banded,
    dirichlet_draws,
    multinomial,
    tally_of_stays,
    two_types,
)


def stay(begin, length, leaves=True, last=6):
    """Joined in `begin`, seen for `length` periods, then left (or still there at the end)."""
    rows = [(p, "steady") for p in range(begin, min(begin + length, last + 1))]
    return ("joined", "", [*rows, (begin + length, "left")] if leaves and begin + length <= last else rows)


STAYS = [stay(1, 9), stay(1, 2), stay(1, 4), stay(2, 1), stay(2, 9), stay(3, 2), stay(4, 9), stay(5, 1), stay(6, 1)]


def test_model_curve_by_hand():
    found = retention(CHAIN, periods=3)
    # fresh: keeps .8, then .9 of whoever is steady or paused
    np.testing.assert_allclose(found.model, [1, 0.8, 0.72, 0.648])
    assert list(found.by_entry) == ["fresh"] and np.isnan(found.low).all() and found.observed is None
    mixed = retention(CHAIN, periods=2, start={"fresh": 1, "steady": 1})
    np.testing.assert_allclose(mixed.model, [1, 0.85, 0.765])
    assert mixed.about()["entry"]["fresh"] == 0.5
    assert "retention over 2 periods (month): 76.5% by the model" in repr(mixed)


def test_two_kinds_and_tenure_bands():
    kept = retention(two_types()[0], periods=24).model[24]
    assert kept == pytest.approx(0.5 * 0.98**24 + 0.5 * 0.8**24)
    np.testing.assert_allclose(retention(banded()[0], periods=2).model, [1, 0.7, 0.63])


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


def test_beside_each_other_in_one_table():
    tally = tally_of_stays(STAYS)
    model = SimpleNamespace(schedule=CHAIN.schedule, tally=tally)
    frame = retention(model, periods=7).to_frame()
    assert frame["observed"].isna().tolist() == [False] * 6 + [True] * 2
    assert frame["immature"].tolist() == [False] * 5 + [True] * 3
    assert frame["model"].iloc[1] == pytest.approx(0.9)  # everybody joined as steady
    assert frame["periods_since_joining"].tolist() == list(range(8))


def test_cohort_triangle_on_paper():
    frame = cohort_table(tally_of_stays(STAYS))
    first = frame[frame["joined"] == "1"]
    assert first["size"].tolist() == [3] * 6 and first["live"].tolist() == [3, 3, 2, 2, 1, 1]
    assert first["lost"].tolist() == [0, 0, 1, 1, 2, 2] and first["complete"].all()
    fifth = frame[frame["joined"] == "5"]
    assert fifth["complete"].tolist() == [True, True] + [False] * 4
    assert fifth["live"].tolist()[:2] == [1, 0] and fifth["live"].isna().sum() == 4


def test_model_interval_by_hand_and_by_draws():
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    found = retention(chain, periods=2, covariance=multinomial(chain.matrix, 400), level=0.95)
    # S_2 = .81, dS_2/dp = 1.8, se = 1.8 sqrt(.09/400); logit scale
    step = 1.959963984540054 * 1.8 * 0.015 / (0.81 * 0.19)
    odds = 0.81 / 0.19 * np.exp([-step, step])
    assert [found.low[2], found.high[2]] == pytest.approx(list(odds / (1 + odds)))
    M = dirichlet_draws(P, 800, 2000)
    by_draws = retention(CHAIN, periods=6, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]))
    by_delta = retention(CHAIN, periods=6, covariance=multinomial(P, 800))
    np.testing.assert_allclose(by_draws.low, by_delta.low, rtol=0.02)
    np.testing.assert_allclose(by_draws.high, by_delta.high, rtol=0.02)


def test_a_row_without_data_ends_the_curve():
    gap = P.copy()
    gap[2] = np.nan
    found = retention(Chain(STATES, gap), periods=4)
    # fresh -> steady -> paused -> (unknown): known for three periods
    np.testing.assert_allclose(found.model[:3], [1, 0.8, 0.72])
    assert np.isnan(found.model[3:]).all()


def test_entry_mix_from_joiners_or_the_entry_states():
    tally = tally_of_stays([*STAYS, ("joined", "", [(6, "fresh")])])
    assert entry_mix(tally, None, CHAIN.schedule).tolist() == pytest.approx([0.1, 0.9, 0, 0, 0])
    assert entry_mix(None, None, CHAIN.schedule).tolist() == [1, 0, 0, 0, 0]


def test_refusals():
    with pytest.raises(NotIdentified, match="Retention needs an exit"):
        retention(Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]]), periods=2)
    with pytest.raises(NotIdentified, match="Nobody is known to have joined within the window"):
        observed_retention(tally_of_stays([("unknown", "", [(1, "steady"), (2, "steady")])]))
    with pytest.raises(CallError, match="The entry mix adds up to 0"):
        retention(CHAIN, periods=2, start={"fresh": 0})
