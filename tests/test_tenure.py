"""Rates by tenure: bands found, projection right where the plain chain is wrong."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.estimator import fit
from cohortflow.projector import retention
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["on", "off"], exits=["off"], entries=["on"])
HAZARD = np.array([0.3, 0.3, 0.1, 0.1, 0.1, 0.1] + [0.03] * 60)  # first two periods, next four, then


def by_tenure(customers=6000, periods=25, seed=1):
    rng = np.random.default_rng(seed)
    entry = rng.integers(0, periods - 1, customers)
    age = np.arange(periods)[None, :] - entry[:, None]
    leaves = (rng.random((customers, periods)) < HAZARD[np.maximum(age - 1, 0)]) & (age > 0)
    gone = np.where(leaves.any(axis=1), leaves.argmax(axis=1), periods)
    t = np.arange(periods)[None, :]
    panel = np.where((age < 0) | (t > gone[:, None]), -1, np.where(t == gone[:, None], 1, 0))
    return panel_tally(panel, STATES)


def test_bands_are_found_and_retention_follows_them():
    f = fit(by_tenure(), model="tenure")
    assert f.settings["bands"] == [2, 6]
    assert f.schedule.components[0].matrices.shape == (1, 9, 9)  # 0..6, not known, the exit
    truth = np.concatenate([[1.0], np.cumprod(1 - HAZARD[:24])])
    curve = retention(f, start={"on": 1}, periods=24).model
    plain = retention(fit(by_tenure()), start={"on": 1}, periods=24).model
    assert np.abs(curve - truth).max() < 0.02
    assert np.abs(plain - truth).max() > 0.08


def test_given_bands_are_taken_and_nothing_to_tell_apart_is_said():
    assert fit(by_tenure(), model="tenure", bands=[1, 3]).settings["bands"] == [1, 3]
    rng = np.random.default_rng(5)
    panel = np.where(np.cumsum(rng.random((800, 20)) < 0.1, axis=1) > 0, 1, 0)
    panel[:, 0] = 0
    panel = np.where((panel == 1) & (np.cumsum(panel, axis=1) > 1), -1, panel)
    f = fit(panel_tally(panel, STATES), model="tenure")
    assert f.settings["bands"] == [] and "no_tenure_bands" in f.notes


@pytest.mark.parametrize("bands", [[], [0, 3], [3, 1], [2, 2], [1.5]])
def test_bands_that_make_no_sense_are_refused(bands):
    with pytest.raises(CallError, match="bands are increasing whole numbers"):
        fit(by_tenure(300), model="tenure", bands=bands)
