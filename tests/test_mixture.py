"""Latent types as a model: number by held-out score, far retention, notes, refusals."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit, future_rates
from cohortflow.estimator.em import membership
from cohortflow.estimator.mixture import laws, type_names
from cohortflow.estimator.patterns import patterns_of
from cohortflow.estimator.window import choose_window
from cohortflow.projector import retention
from cohortflow.states import States
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate

ON = States(["on", "off"], exits=["off"], entries=["on"])


def two_hazards(customers=6000, periods=13, seed=1):
    """Half leave at 20 %, half at 2 % a month: 31 % are left after two years; the pooled rate says 6 %."""
    rng = np.random.default_rng(seed)
    hazard = np.where(np.arange(customers) % 2, 0.2, 0.02)
    gone = rng.random((customers, periods)) < hazard[:, None]
    gone[:, 0] = False
    last = np.where(gone.any(axis=1), gone.argmax(axis=1), periods)
    t = np.arange(periods)
    panel = np.where(t < last[:, None], 0, np.where(t == last[:, None], 1, -1))
    shifted = np.full((customers, periods + 1), -1)
    shifted[:, 1:] = panel  # all join in period 1, so that nobody is of unknown history
    shifted[0] = np.append(0, panel[0])
    return panel_tally(shifted, ON)


def test_sorting_is_repaired_far_beyond_the_window():
    counts = two_hazards()
    f, plain = fit(counts, model="mixture"), fit(counts)
    assert f.settings["types"] == 2 and f.settings["converged"]
    truth = (0.8**24 + 0.98**24) / 2
    far = {m: retention(m, start={"on": 1}, periods=24).model[-1] for m in (f, plain)}
    assert abs(far[f] - truth) < abs(far[plain] - truth) / 4
    # customers who are left now are mostly of the sticky type: .98^12 against .2 ... of equal halves
    sticky = f.schedule.components[0].start[0, 0]
    assert sticky == pytest.approx(0.98**12 / (0.98**12 + 0.8**12), abs=0.06)
    assert f.schedule.components[0].join[0, 0] == pytest.approx(0.5, abs=0.1)


def test_one_law_for_everybody_keeps_one_type():
    rng = np.random.default_rng(3)
    counts = panel_tally(simulate(CHAIN, np.zeros(2000, int), 13, rng), STATES)
    f = fit(counts, model="mixture")
    assert f.settings["types"] == 1 and f.schedule.is_plain
    assert np.abs(f.schedule.chain.matrix - fit(counts).P).max() < 0.02
    assert fit(counts, model="mixture", types=2).settings["types"] == 2


def test_laws_add_up_and_a_state_nobody_is_in_takes_the_joiners():
    counts = two_hazards(500)
    patterns = patterns_of(counts, choose_window(counts))
    f = fit(counts, model="mixture", types=2)
    found = f.sampler.types
    now, join = laws(patterns, found, membership(patterns, found)[0])
    assert np.allclose(now.sum(axis=1), 1) and np.allclose(join.sum(axis=1), 1)
    assert np.allclose(now[1], join[1]) and type_names(found) == ["type 1", "type 2"]


def test_draws_shocks_and_projection_hold_for_types():
    f = fit(two_hazards(1500), model="mixture", types=2)
    draws = f.draws(200, rng=1)
    assert all(np.allclose(m.sum(axis=-1), 1) for m in draws.matrices)
    assert np.allclose(sum(s.sum(axis=2) for s in draws.start), 1)
    shaken = future_rates(f, 4, 50, rng=1)
    assert np.allclose(shaken.matrix(1, 2).sum(axis=2), 1)


def test_mover_stayer_of_customers_who_leave():
    f = fit(two_hazards(2000), model="mover_stayer")
    names = [c.name for c in f.schedule.components]
    assert sorted(names) == ["movers", "stayers"] and 0.1 < f.settings["shares"]["stayers"] < 0.6


def test_what_cannot_be_told_is_noted_or_refused():
    counts = two_hazards(400, periods=3)  # three moves at most
    f = fit(counts, model="mixture", types=2)
    assert "types_not_identified" in f.notes
    with pytest.raises(CallError, match="types is a whole number from 1 on; got 0"):
        fit(counts, model="mixture", types=0)
    with pytest.raises(CallError, match="starts is a whole number from 1 on; got -1"):
        fit(counts, model="mixture", starts=-1)
    with pytest.raises(NotIdentified, match='do not hold the table "paths"'):
        fit(panel_tally([[0, 0, 1]], ON, full=False), model="mixture")
