"""How many join: each method by hand or against statsmodels; short histories are refused."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector.joiner_methods import (
    _concentration,
    constant,
    error_covariance,
    joiner_forecast,
    last_year,
    planned,
    smoothing,
)
from tests.projector_cases import MONTHS, SEPTEMBER, STATES, tally_of_stays


def tally(numbers=(3, 2, 4, 3, 5, 4), returned=0):
    """Stays that begin in each period: `numbers` joiners as fresh, one in three as steady."""
    stays = []
    for period, number in enumerate(numbers, start=1):
        for k in range(number):
            state = "steady" if k % 3 == 2 else "fresh"
            stays.append(("joined", "", [(p, state if p == period else "steady") for p in range(period, 7)]))
    stays += [("returned", "left", [(6, "steady")])] * returned
    return tally_of_stays(stays)


def test_constant_by_hand():
    # 90 110 100 100: mean 100, s^2 = 200/3, widened by 3/1 to 200; beyond Poisson 100; mean off by 200/4
    mean, extra = constant(np.array([5.0, 90, 110, 100, 100]), 3, 4)
    assert mean.tolist() == [100] * 3
    np.testing.assert_allclose(extra, 100 * np.eye(3) + 50)
    # calmer than Poisson: no spread of periods, the mean's own error is Poisson's, 100/4
    np.testing.assert_allclose(constant(np.full(4, 100.0), 2, 4)[1], 25 * np.ones((2, 2)))
    np.testing.assert_allclose(
        constant(np.array([100.0]), 1, 4)[1], [[100.0]]
    )  # one period tells its Poisson error


def test_constant_predicts_with_the_stated_error():
    # 3,000 histories of 12 Poisson(40) counts, log-normal rates of SD .2: nominal 90 % range of the next two
    rng = np.random.default_rng(4)
    rates = 40 * np.exp(0.2 * rng.standard_normal((3000, 14)) - 0.02)
    numbers = rng.poisson(rates).astype(float)
    z = []
    for row in numbers:
        mean, extra = constant(row[:12], 2, 12)
        total = extra + np.diag(mean)
        z.append((row[12:].sum() - mean.sum()) / np.sqrt(total.sum()))
    assert 0.87 < np.mean(np.abs(z) < 1.645) < 0.93


def test_last_year_repeats_and_widens():
    growing = np.array([100.0, 200, 110, 220, 121, 242])
    mean, extra = last_year(growing, 4, 2)
    assert mean.tolist() == [121, 242, 121, 242]
    # every repetition was 10 % short, 693 for 630: shared by all periods is log(1.1)^2 less the Poisson noise
    # of that growth, (693 + 1.1^2 x 630) / 693^2, once for one cycle ahead, doubled (as a factor) for two
    noise = (693 + 1.1**2 * 630) / 693**2
    ahead = mean * [1, 1, 2, 2]
    shared = np.outer(ahead, ahead) * (np.log(1.1) ** 2 - noise)
    np.testing.assert_allclose(extra, shared + np.diag(mean), rtol=1e-9)
    # nobody in the first cycle: growth from one
    assert np.isfinite(last_year(np.array([0.0, 0, 0, 3, 2, 4]), 3, 3)[1]).all()
    with pytest.raises(NotIdentified, match='"last_year" needs one cycle of 12 periods and 3 more'):
        last_year(growing, 4, 12)


def test_last_year_sees_how_much_months_differ_beyond_chance():
    # 4,000 histories of two cycles of 4: Poisson around rates with a log-normal SD of .3; the next
    # cycle's errors must be as large as stated, singly and summed
    rng = np.random.default_rng(6)
    numbers = rng.poisson(400 * np.exp(0.3 * rng.standard_normal((4000, 12)) - 0.045)).astype(float)
    one, whole = [], []
    for row in numbers:
        mean, extra = last_year(row[:8], 4, 4)
        error, stated = row[8:] - mean, extra + np.diag(mean)
        one.append((error[0] ** 2, stated[0, 0]))
        whole.append((error.sum() ** 2, stated.sum()))
    # the sum is stated too wide rather than too narrow: growth that is noise is not always known as such
    for pairs, most in ((one, 1.3), (whole, 1.9)):
        seen, said = np.mean(pairs, axis=0)
        assert 0.85 < said / seen < most


def test_smoothing_errors_agree_with_statsmodels():
    # independent implementation: forecast variances of statsmodels' ETSModel, for the fitted parameters
    from statsmodels.tsa.exponential_smoothing.ets import ETSModel

    rng = np.random.default_rng(0)
    logs = 5 + 0.02 * np.arange(48) + 0.2 * np.sin(np.arange(48) * np.pi / 6) + 0.05 * rng.standard_normal(48)
    for season in (0, 12):
        options = {"seasonal": "add", "seasonal_periods": season} if season else {}
        model = ETSModel(pd.Series(logs), error="add", trend="add", damped_trend=True, **options)
        fitted = model.fit(disp=False)
        theirs = fitted.get_prediction(start=48, end=71).forecast_variance
        ours = error_covariance(dict(zip(model.param_names, fitted.params, strict=True)), season, 24)
        np.testing.assert_allclose(np.diag(ours) * np.mean(fitted.resid**2), theirs, rtol=1e-6)


def test_smoothing_follows_growth():
    numbers = 100 * 1.02 ** np.arange(40)
    mean, extra = smoothing(numbers, 6, 1)
    assert mean[0] == pytest.approx(100 * 1.02**40, rel=0.03) and (np.diff(mean) > 0).all()
    assert (np.linalg.eigvalsh(extra) >= -1e-6).all()
    with pytest.raises(NotIdentified, match='"smoothing" needs at least 8 periods; the history has 5'):
        smoothing(numbers[:5], 6, 1)


def test_joiners_and_returners_apart_from_a_tally():
    found = joiner_forecast(tally(returned=6), 2, method="constant")
    # six periods, 21 joiners, five of them steady from the start
    assert found.inflows["joined"].mean.tolist() == pytest.approx([3.5, 3.5])
    assert found.inflows["joined"].mix[0].tolist() == pytest.approx([16 / 21, 5 / 21, 0, 0, 0])
    assert found.inflows["returned"].mean.tolist() == [1, 1] and found.base == 6
    assert joiner_forecast(tally(), 2, method="none").expected().sum() == 0
    nobody_returns = joiner_forecast(tally(), 2, method="constant").inflows["returned"]
    assert nobody_returns.mean.tolist() == [0, 0] and not nobody_returns.extra.any()
    assert joiner_forecast(tally(), 2, method="constant", window=2).inflows["joined"].mean[0] == 4.5


def test_periods_in_which_everybody_is_new_to_the_log_do_not_count():
    old = [("unknown", "", [(p, "steady") for p in range(1, 7)])] * 9
    stays = [*old, *(("joined", "", [(p, "fresh") for p in range(begin, 7)]) for begin in (2, 3, 3, 4, 5))]
    found = joiner_forecast(tally_of_stays(stays), 1, method="constant").inflows["joined"]
    assert found.mean[0] == 1  # five joined in the five periods 2 to 6


def test_mix_varies_as_it_did():
    same = np.tile([30, 20, 10], (8, 1))
    assert _concentration(same) == np.inf
    rng = np.random.default_rng(1)
    table = np.array([rng.multinomial(200, q) for q in rng.dirichlet(25 * np.array([0.5, 0.3, 0.2]), 400)])
    assert _concentration(table) == pytest.approx(25, rel=0.2)
    assert _concentration(np.array([[5, 0], [6, 0]])) == np.inf


def test_a_plan_is_taken_as_given():
    rows = pd.DataFrame(
        {"period": ["2026-10", "2026-11", "2026-11"], "kind": ["joined", "joined", "returned"],
         "state": ["fresh", "fresh", "steady"], "customers": [40, 50, 5]}
    )  # fmt: skip
    found = planned(STATES, rows, 2, calendar=MONTHS, base=SEPTEMBER)
    assert found.expected("joined")[:, 0].tolist() == [40, 50]
    assert found.expected("returned")[:, 1].tolist() == [0, 5]
    assert found.inflows["joined"].covariance.tolist() == [[40, 0], [0, 50]]
    with pytest.raises(CallError, match='The plan says nothing about "2026-12"'):
        planned(STATES, rows, 3, calendar=MONTHS, base=SEPTEMBER)
    with pytest.raises(CallError, match='The plan lacks the columns "customers"'):
        planned(STATES, rows.drop(columns="customers"), 2, calendar=MONTHS, base=SEPTEMBER)
    with pytest.raises(CallError, match='The plan has the kind "new"; allowed: "joined", "returned"'):
        planned(STATES, rows.replace("returned", "new"), 2, calendar=MONTHS, base=SEPTEMBER)
    with pytest.raises(CallError, match="method planned needs plan="):
        joiner_forecast(tally(), 2, method="planned")


def test_refusals():
    with pytest.raises(CallError, match=r'Unknown method "last_yaer" \(did you mean "last_year"'):
        joiner_forecast(tally(), 2, method="last_yaer")
    with pytest.raises(CallError, match="window belongs to the method constant"):
        joiner_forecast(tally(), 2, method="smoothing", window=3)
