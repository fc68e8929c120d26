"""Rates by place in the cycle, shrunk by what the years tell."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit
from tests.bench.worlds import CHAIN, STATES, cube_tally, shocked_cube

YEAR = 12


def counts(years=4, customers=20_000, jump=0.6931, seed=1, calendar="month", **law):
    """Exits have higher odds in the third month of the year (origin period = 2 mod 12)."""
    rng = np.random.default_rng(seed)
    path = np.zeros(years * YEAR)
    path[2::YEAR] = jump
    if law:
        from tests.bench.worlds import autoregression

        path = path + autoregression(rng, len(path), law["exit_sd"], 0.0)
    cube = shocked_cube(CHAIN, STATES, customers, years * YEAR, rng, path=path)
    return cube_tally(cube, STATES, first=600, calendar=calendar)  # ordinal 600 = January 2020


def test_the_season_is_found_and_starts_at_its_place():
    f = fit(counts(), model="seasonal")
    part = f.schedule.components[0]
    assert part.tail == "cycle" and part.matrices.shape == (12, 5, 5)
    # the tally ends at ordinal 648, a January: step 0 is January's matrix, step 2 March's
    odds = [p[1, 4] / (1 - p[1, 4]) for p in part.matrices]
    assert int(np.argmax(odds)) == 2
    assert odds[2] / np.median(odds) == pytest.approx(2.0, rel=0.12)
    assert np.allclose(part.matrices.sum(axis=2), 1) and f.position(602) == 2


def test_no_season_is_shrunk_away_also_when_months_share_luck():
    calm, lucky = (
        fit(counts(jump=0.0), model="seasonal"),
        fit(counts(jump=0.0, exit_sd=0.2), model="seasonal"),
    )
    for f in (calm, lucky):
        assert np.mean(list(f.settings["kept"].values())) < 0.35
    strong = fit(counts(), model="seasonal")
    assert strong.settings["kept"]["D"] > 0.8


def test_thin_seasons_say_so_and_unseen_places_are_pooled():
    f = fit(counts(years=1), model="seasonal")
    assert "seasons_thin" in f.notes
    half = fit(counts(), model="seasonal", window=6)
    assert sum(n.startswith("place_not_seen") for n in half.notes) == 6
    assert np.allclose(half.schedule.components[0].matrices.sum(axis=2), 1)


def test_own_cycle_and_refusals():
    f = fit(counts(calendar="step"), model="seasonal", cycle=12)
    assert f.settings["cycle"] == 12 and f.season.shape == (12, 5)
    with pytest.raises(NotIdentified, match='Periods of kind "step" have no season; pass cycle='):
        fit(counts(calendar="step"), model="seasonal")
    with pytest.raises(CallError, match="cycle is a number of periods from 2 on; got 1"):
        fit(counts(), model="seasonal", cycle=1)


def test_draws_hold_every_place():
    draws = fit(counts(years=2, customers=2000), model="seasonal").draws(200, rng=1)
    assert draws.matrices[0].shape == (200, 12, 5, 5) and np.allclose(draws.matrices[0].sum(axis=3), 1)
