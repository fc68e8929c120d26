"""The models by name: recent, options, and a common law for all of them."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.estimator import fit
from cohortflow.estimator.variants import MODELS
from cohortflow.projector import project
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate

RNG = np.random.default_rng(4)
ENTRY, HALF = RNG.integers(0, 29, 1500), RNG.integers(0, 2, 1500)
PANEL = simulate(CHAIN, np.zeros(1500, int), 30, RNG, entry=ENTRY)
TALLY = panel_tally(PANEL, STATES, calendar="month", first=600, segment=HALF)


@pytest.mark.parametrize("model", sorted(MODELS))
def test_every_model_is_a_schedule_that_the_projector_takes(model):
    f = fit(TALLY, model=model, **({"by": "group"} if model == "segment" else {}))
    for part in f.schedule.components:
        assert np.allclose(part.matrices.sum(axis=2), 1) and (part.matrices >= 0).all()
    draws = f.draws(30, rng=1)
    assert all(np.allclose(m.sum(axis=-1), 1) for m in draws.matrices)
    ahead = project(f, periods=6, draws=30)
    # nobody is lost or made: customers and exits add up to the opening
    assert np.allclose(ahead.mean.sum(axis=1), TALLY.mix().sum())
    # one law for everybody: every model is near the plain one
    plain = project(fit(TALLY), periods=6, draws=30)
    assert np.abs(ahead.mean[6] - plain.mean[6]).max() < 0.06 * TALLY.mix().sum()


def test_recent_takes_a_year_unless_told_and_reports_its_effective_number():
    f = fit(TALLY, model="recent")
    assert (f.first, f.last) == (f.last - 11, f.last)
    assert fit(TALLY, model="recent", window=5).first == f.last - 4
    weighted = fit(TALLY, model="recent", half_life=4)
    assert weighted.first == fit(TALLY).first
    assert weighted.settings["effective_n"]["R"] == pytest.approx(weighted.effective[1])
    assert weighted.effective[1] < fit(TALLY).effective[1]


def test_options_of_another_model_are_refused():
    with pytest.raises(CallError, match='The tenure model takes no option "ladder". Its options: "bands"'):
        fit(TALLY, model="tenure", ladder=3)
