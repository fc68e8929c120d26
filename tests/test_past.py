"""Forecasts from past origins."""

import numpy as np
import pytest

from cohortflow.assessment.outlook import Setting, SharedLuck, coming
from cohortflow.assessment.past import PastForecast, slimmed
from cohortflow.estimator import fit
from cohortflow.estimator.shock_paths import future_rates
from cohortflow.projector import project
from cohortflow.tally import COARSE_BITS
from tests.adequacy_cases import monthly, tally_of, world

SETTING = Setting(4, draws=300)


def made(tally, model="plain", setting=SETTING, seed=1):
    return PastForecast.of(tally, model, setting, SharedLuck(), np.random.default_rng(seed))


def test_expected_numbers_are_those_of_the_projection():
    tally = monthly(500)
    found, joiners = made(tally), coming(tally, SETTING)
    with_joiners = project(fit(tally), periods=4, joiners=joiners, draws=10)
    np.testing.assert_allclose(found.base_mean, with_joiners.mean, rtol=1e-12)
    np.testing.assert_allclose(found.alone_mean, project(fit(tally), periods=4, draws=10).mean, rtol=1e-12)


def test_bands_are_about_those_of_the_projection():
    tally = monthly(500)
    setting = Setting(4, draws=3000)
    found = made(tally, setting=setting)
    shocks = future_rates(fit(tally), 4, 3000, rng=2)
    ahead = project(
        fit(tally), periods=4, joiners=coming(tally, setting), shocks=shocks, draws=shocks.rates, rng=3
    )
    live = tally.states.live_mask
    mine, theirs = found.base[:, -1, live].sum(axis=1), ahead.paths("all_live")[:, -1]
    assert mine.mean() == pytest.approx(theirs.mean(), rel=0.02)
    assert mine.std() == pytest.approx(theirs.std(), rel=0.10)  # 3,000 draws each: about 2.6 % of a sd apart


def test_without_joiners_both_bases_are_one():
    found = made(monthly(200), setting=Setting(3, joiners="none", draws=20))
    assert found.base is found.alone


def test_short_histories_do_without_shocks():
    found = made(tally_of(["0000", "0001", "0112", "0012"]), setting=Setting(2, draws=20))
    assert found.alone.shape == (20, 3, 3)


def test_slimmed_keeps_counts_and_drops_what_is_not_needed():
    tally = monthly(400)
    slim = slimmed(tally, segments=False)
    assert slim.counts().tolist() == tally.counts().tolist()
    assert slim.mix().tolist() == tally.mix().tolist()
    assert set(slim.meta.tables) == {"moves", "starts", "contexts", "ages", "paths"}


def test_slimmed_drops_segments_unless_asked():
    tally = world("markov", 100, segments=True)
    assert slimmed(tally, segments=False).meta.segments == ((),)
    assert slimmed(tally, segments=True).segment_values("group") == ["a", "b"]


def test_slimmed_coarsens_hashed_buckets_and_leaves_others():
    tally = monthly(400)  # buckets 0 .. 63 at 62 bits are no hashes: shifted they would all be one
    assert slimmed(tally, segments=False).meta.bucket_bits == tally.meta.bucket_bits
    moves = tally.tables["moves"]
    hashed = moves.assign(bucket=(moves["bucket"].to_numpy() * 2654435761 * 2**28) % 2**62)
    spread = tally.__class__.build(tally.meta, {**tally.tables, "moves": hashed})
    slim = slimmed(spread, segments=False)
    assert slim.meta.bucket_bits == COARSE_BITS
    assert slim.counts().tolist() == tally.counts().tolist()
    assert 32 <= slim.tables["moves"]["bucket"].nunique() <= 64
