"""Forecasts that effects and backtests share."""

import numpy as np
import pytest

from cohortflow.assessment.outlook import Setting, SharedLuck, coming, expected_live, one_step, outlook
from cohortflow.estimator import fit
from cohortflow.projector import project
from tests.adequacy_cases import P, monthly, tally_of, world


def test_options_reach_the_model():
    tally = monthly(300)
    setting = Setting(3, options={"recent": {"window": 5}})
    assert setting.fit(tally, "recent").window.first == tally.meta.last - 5
    assert setting.fit(tally, "plain").window.first == tally.meta.first


def test_joiners_by_the_method_or_constant_or_none():
    tally = monthly(300)
    assert coming(tally, Setting(3, joiners="last_year")).method == "last_year"
    assert (
        coming(tally.at_origin(tally.meta.first + 10), Setting(3, joiners="last_year")).method == "constant"
    )
    assert coming(tally, Setting(3, joiners="none")) is None
    assert coming(world("markov", 50).__class__.build(*_bare()), Setting(3)) is None


def _bare():
    tally = tally_of(["0000", "0112"], full=False)
    return tally.meta, tally.tables


def test_expected_live_is_that_of_the_projection():
    tally = monthly(300)
    setting = Setting(4)
    fitted, joiners = fit(tally), coming(tally, setting)
    ahead = project(fitted, periods=4, joiners=joiners, draws=10)
    assert expected_live(fitted, setting, joiners) == pytest.approx(ahead.expected("all_live")[-1], rel=1e-12)
    made = outlook(fitted, setting, joiners=joiners, rng=np.random.default_rng(1))
    assert made.paths("all_live").shape == (setting.draws, 5)


def test_the_next_move_averages_the_draws():
    fitted = fit(monthly(3000))
    law = one_step(fitted.draws(300, rng=1), fitted.tally.meta.last)
    assert law.sum(axis=1) == pytest.approx(np.ones(5))
    assert np.abs(law - P).max() < 0.06  # the chain that the panel was drawn from


def test_shared_luck_is_estimated_once_for_all_models_with_the_same_seasons():
    tally = monthly(600)
    luck = SharedLuck()
    setting = Setting(3, draws=20)
    drawn = luck.draws(fit(tally), setting, np.random.default_rng(1))
    known = dict(luck.known)
    luck.draws(fit(tally, model="recent", window=12), setting, np.random.default_rng(1))
    assert drawn.size == 20 and luck.known == known and list(known) == [0]


def test_short_histories_tell_no_luck():
    tally = tally_of(["0000", "0012", "0112"])
    assert SharedLuck().draws(fit(tally), Setting(2, draws=10), np.random.default_rng(1)) is None
