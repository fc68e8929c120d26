"""Effects: the repairing model beside the plain chain."""

import numpy as np
import pytest

from cohortflow.assessment.effect import Effects
from cohortflow.assessment.finding import Finding
from cohortflow.assessment.outlook import Setting, coming
from cohortflow.estimator import fit
from cohortflow.projector import project
from tests.adequacy_cases import monthly, tally_of


def test_effect_is_the_difference_of_two_projections():
    tally = monthly(400)
    setting = Setting(4, options={"recent": {"window": 6}})
    effects = Effects.of(tally, setting, np.random.default_rng(1))
    joiners = coming(tally, setting)
    plain = project(fit(tally), periods=4, joiners=joiners, draws=10).expected("all_live")[-1]
    recent = project(fit(tally, model="recent", window=6), periods=4, joiners=joiners, draws=10)
    found = effects.of_finding(Finding("drift", "eras", "recent"))
    assert effects.live == pytest.approx(plain)
    assert found == pytest.approx(recent.expected("all_live")[-1] - plain, rel=1e-9)
    assert effects.known == {("recent", ""): found}


def test_common_shocks_widen_the_band_and_leave_the_mean():
    effects = Effects.of(monthly(400), Setting(4), np.random.default_rng(1))
    finding = Finding("drift", "periods", "common_shocks")
    assert effects.of_finding(finding) == effects.half_width - effects.calm
    assert effects.yardstick(finding) == effects.calm
    assert effects.yardstick(Finding("drift", "eras", "recent")) == effects.half_width > 0


def test_a_model_that_these_counts_do_not_allow_has_no_known_effect():
    effects = Effects.of(tally_of(["0000", "0112", "0122"], full=False), Setting(2), np.random.default_rng(1))
    assert effects.live > 0
    assert np.isnan(effects.of_finding(Finding("order", "previous_state", "second_order")))
    assert np.isnan(effects.of_finding(Finding("order", "previous_state", "no_such_model")))


def test_without_a_forecast_nothing_is_known():
    effects = Effects.of(tally_of(["0.", "0."]), Setting(2), np.random.default_rng(1))  # no move at all
    assert np.isnan([effects.live, effects.half_width, effects.calm]).all()
