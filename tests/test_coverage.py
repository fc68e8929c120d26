"""A small version of tests/bench/coverage.py: intervals and bands hold about what they promise."""

import numpy as np
import pytest

from tests.bench.coverage import (
    band_replication,
    cells_markov,
    derived_replication,
    oracle_width,
    pooled_limit,
    shocked_limit,
    truths,
)
from tests.bench.worlds import CHAIN, STATES, settled


def test_cells_of_one_chain_for_everybody():
    # 2,000 replications: standard error of a coverage .005
    found = cells_markov(200, 2000, seed=1)
    assert 0.94 < found["wilson"].mean() < 0.96 and found["wilson"].min() > 0.925
    assert found["clopper-pearson"].min() > 0.935 and found["goodman rows"].min() > 0.93


@pytest.mark.parametrize(("world", "customers"), [("Markov", 200), ("shocks", 1000)])
def test_derived_quantities(world, customers):
    # 40 replications of 3 quantities; at a true coverage of .93 fewer than 96 of 120 happens once in 10,000
    limit = CHAIN if world == "Markov" else shocked_limit(40_000)
    found = np.array([derived_replication((world, customers, s, truths(limit))) for s in range(40)])
    assert np.nansum(found) >= 96


def test_bands_with_and_without_shared_luck():
    # nominal 90 % at four horizons; the horizons of one replication hang together
    inside, width = [], []
    for world, customers in (("none", 2_000), ("exits .6", 50_000), ("both", 50_000)):
        for seed in range(10):
            hit, ratio = band_replication((world, customers, seed, 200))
            inside.append(hit)
            width.append(ratio)
    assert 0.78 < np.mean(inside) < 0.99
    # nobody can be narrower than somebody who knows the law for long, and ours are not twice as wide
    assert 0.9 < np.mean(width) < 2.0


def test_the_truths_are_what_they_say():
    # expected life from N 12.6175, share in R and L after 12 periods .2611, survivors' mix .350315 (recomputed)
    power = np.linalg.matrix_power(CHAIN, 12)
    assert power[0, 1:3].sum() == pytest.approx(0.2611, abs=5e-5)
    assert truths(CHAIN) == pytest.approx([1 - power[0, 4], 12.6175, 0.350315], abs=5e-5)
    assert np.allclose(pooled_limit(customers=4000).sum(axis=1), 1)
    mix, joining = settled(CHAIN, STATES.exit_mask, 1000)
    assert mix @ CHAIN[:, :4].sum(axis=1) + joining == pytest.approx(1000)


def test_an_oracle_without_shocks_is_the_multinomial_alone():
    mix, joining = settled(CHAIN, STATES.exit_mask, 2000)
    width = oracle_width(np.rint(mix).astype(int), joining, (0.0, 0.0, 0.0), 0.0, np.zeros((5, 5)),
                         np.random.default_rng(1), 4000)  # fmt: skip
    # one period ahead: variance of stays sum n_i q_i (1 - q_i) plus the joiners' Poisson
    stay = CHAIN[:4, :4].sum(axis=1)
    sd = np.sqrt((mix[:4] * stay * (1 - stay)).sum() + joining)
    assert width[0] == pytest.approx(2 * 1.645 * sd, rel=0.06)
