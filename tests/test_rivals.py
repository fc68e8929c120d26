"""Rivals: each forecast by hand, none that sees the future, bands from past errors."""

import numpy as np
import pytest
from scipy import stats

from cohortflow.assessment.rivals import (
    RIVALS,
    Observed,
    RivalForecasts,
    cohort_curve,
    constant_churn,
    last_mix,
    last_year,
    simple_joiners,
)
from tests.adequacy_cases import monthly, tally_of

# three states a, b, left; periods 0 .. 4
LINES = ["00000", "00002", "0002.", "01111", "..000", "...12", "11111", "02..."]


def seen(horizon=2, **more):
    return Observed.of(tally_of(LINES, **more), horizon)


def test_what_happened_by_hand():
    found = seen()
    assert found.mix[:, 0].tolist() == [5, 3, 4, 3, 2]  # column by column of LINES
    assert found.mix[:, 1].tolist() == [1, 2, 2, 3, 2]
    assert found.joiners.sum(axis=1).tolist() == [0, 0, 1, 1, 0]
    assert found.all_live.tolist() == [6, 5, 6, 6, 4]
    # of the 6 live in period 0 one has left a period later, and still one two periods later
    assert found.of_origin(0).tolist() == [6, 5, 5]
    assert np.isnan(found.of_origin(4)[1:]).all()
    assert found.ages[2, 0] == 1 and found.ages[4].tolist()[:3] == [0, 0, 1]


def test_last_mix():
    base, alone = last_mix(seen(), 3, 2)
    assert base.tolist() == [[3, 3, 0]] * 3
    assert alone.tolist() == [6, 6, 6]


def test_constant_churn_by_hand():
    # up to period 3: departures 6 + 5 + 6 = 17; exits: 0-1 one, 1-2 none, 2-3 one: c = 2/17
    base, alone = constant_churn(seen(), 3, 2)
    stay = 15 / 17
    assert alone == pytest.approx([6, 6 * stay, 6 * stay**2])
    # joiners a period so far: (0 + 1 + 1) / 3
    assert base.sum(axis=1) == pytest.approx([6, 6 * stay + 2 / 3, (6 * stay + 2 / 3) * stay + 2 / 3])
    assert base[1] / base[1].sum() == pytest.approx([0.5, 0.5, 0])  # split as at the origin


def test_last_year_by_hand():
    # a calendar of quarters: period 4 is a year after period 0
    found = seen(calendar="quarter", first=200)
    base, alone = last_year(found, 4, 2)
    assert base.tolist() == [[2, 2, 0], [3, 2, 0], [4, 2, 0]]  # periods 5 and 6: as periods 1 and 2
    assert alone == pytest.approx([4, 4 * 5 / 6, 4 * 5 / 6])


def test_last_year_without_a_calendar_has_nothing_to_say():
    base, alone = last_year(seen(), 3, 2)
    assert np.isnan(base[1:]).all() and np.isnan(alone[1:]).all()


def test_cohort_curve_follows_ages():
    # 100 a month, of whom 60 % are there at age 1 and 90 % of these a month later, for ever after
    rng = np.random.default_rng(1)
    lines = []
    for start in range(1, 9):
        for _ in range(100):
            life = 0 if rng.random() > 0.6 else int(rng.geometric(0.1))
            text = "." * start + "0" * (life + 1) + "2"
            lines.append(text[:10].ljust(10, "."))
    found = Observed.of(tally_of(lines), 3)
    base, alone = cohort_curve(found, 8, 3)
    age = found.ages[8]
    first, later = (found.ages[1:9, 1].sum() / found.ages[:8, 0].sum(), 0.9)
    assert alone[1] == pytest.approx(age[0] * first + age[1:].sum() * later, rel=0.02)
    assert base[1].sum() == pytest.approx(alone[1] + 100, rel=0.01)  # joiners come on top


def test_joiners_of_rivals():
    found = seen(calendar="quarter", first=200)
    assert simple_joiners(found, 4, 2).sum(axis=1).tolist() == [0, 1]  # periods 1 and 2
    assert simple_joiners(found, 2, 2).sum(axis=1).tolist() == [0.5, 0.5]  # no year yet: mean of periods 1, 2
    assert simple_joiners(found, 0, 2).sum(axis=1).tolist() == [0, 0]


@pytest.mark.parametrize("name", RIVALS)
def test_no_rival_sees_the_future(name):
    tally = monthly(600, periods=30)
    origin = 20
    whole = RIVALS[name](Observed.of(tally, 4), origin, 4)
    cut = RIVALS[name](Observed.of(tally.at_origin(tally.meta.first + origin), 4), origin, 4)
    for a, b in zip(whole, cut, strict=True):
        np.testing.assert_allclose(a, b, equal_nan=True)


def test_bands_come_from_past_errors():
    found = Observed.of(monthly(600, periods=30), 3)
    made = RivalForecasts.of("last_mix", found, 3)
    live = found.live.astype(float)
    point, spread, low, high = made.band(live, 20, 3, 0.9)
    # the errors of 3-step forecasts from origins 3 .. 17, which had come true by period 20
    y = found.all_live
    errors = np.array([y[o + 3] - y[o] for o in range(3, 18)])
    assert point == y[20]
    assert spread == pytest.approx(np.sqrt((errors**2).mean()))
    reach = stats.t.ppf(0.95, 14) * spread
    assert (low, high) == (pytest.approx(max(y[20] - reach, 0)), pytest.approx(y[20] + reach))


def test_few_past_errors_make_no_band():
    made = RivalForecasts.of("last_mix", Observed.of(monthly(200, periods=12), 3), 3)
    assert np.isnan(made.band(None, 8, 3, 0.9)[1:]).all()  # origins 3 .. 5 only
