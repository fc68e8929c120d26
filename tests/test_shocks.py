"""The law of shocks: what was put in is found, what is not there is not; refusals and short histories."""

import numpy as np
import pytest
from scipy import stats

from cohortflow.errors import NotIdentified
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shock_rows import Whitened, row_logs
from cohortflow.estimator.shocks import PERSISTENCES, SIZES, correlation, estimate_shocks
from tests.bench.worlds import CHAIN, STATES, shocked_cube


def rows_of(cube, first=0):
    t, i, j = np.nonzero(cube)
    one = np.ones(len(t))
    return RowCounts(STATES.allowed, i, j, 0 * i, t + first, cube[t, i, j], one, one)


def found(exit_sd, cell_sd, persistence, *, periods=36, customers=50_000, seeds=range(4)):
    out = []
    for seed in seeds:
        cube = shocked_cube(
            CHAIN,
            STATES,
            customers,
            periods,
            np.random.default_rng(seed),
            exit_sd=exit_sd,
            cell_sd=cell_sd,
            persistence=persistence,
        )
        summary = estimate_shocks(rows_of(cube), STATES).summary
        out.append([summary[name][0] for name in ("exit_sd", "cell_sd", "persistence")])
    return np.mean(out, axis=0)


def test_nothing_is_found_where_nothing_is():
    exit_sd, cell_sd, _ = found(0.0, 0.0, 0.0)
    assert exit_sd < 0.02 and cell_sd < 0.02


def test_a_shared_shock_on_exits_is_told_from_shocks_of_cells():
    exit_sd, cell_sd, persistence = found(0.2, 0.0, 0.0)
    assert exit_sd == pytest.approx(0.2, abs=0.04) and cell_sd < 0.03 and persistence < 0.3
    exit_sd, cell_sd, persistence = found(0.0, 0.2, 0.6)
    assert cell_sd == pytest.approx(0.2, abs=0.03) and exit_sd < 0.1
    assert persistence == pytest.approx(0.6, abs=0.12)


def test_the_likelihood_equals_a_dense_gaussian_one():
    """One row, diffuse means: restricted likelihood of y on the complement of X."""
    cube = shocked_cube(
        CHAIN, STATES, 800, 12, np.random.default_rng(3), exit_sd=0.2, cell_sd=0.1, persistence=0.4
    )
    log = row_logs(cube, STATES.exit_mask, np.zeros(12, dtype=int))[1]
    R, size, exit_size = correlation(12, 0.4), 0.1, 0.2
    complement = np.linalg.svd(log.X)[0][:, log.X.shape[1] :]

    def dense(cell, shared):
        C = log.noise + cell**2 * log.signal(R) + shared**2 * log.Z @ R @ log.Z.T
        return -2 * stats.multivariate_normal.logpdf(complement.T @ log.y, cov=complement.T @ C @ complement)

    def ours(cell, shared):
        score, M, m = Whitened.of(log, R).profile(cell)
        K = shared**2 * R
        gap = np.linalg.slogdet(np.eye(12) + K @ M)[1] - m @ np.linalg.solve(np.eye(12) + K @ M, K @ m)
        return score + gap

    # differences: constants cancel
    assert ours(size, exit_size) - ours(0.3, 0.0) == pytest.approx(
        dense(size, exit_size) - dense(0.3, 0.0), abs=1e-8
    )


def test_seasons_are_not_taken_for_shocks():
    # exits double in one month of twelve, no shocks: with seasons taken out nothing is left
    season = np.zeros(48)
    season[::12] = np.log(2)
    cube = shocked_cube(CHAIN, STATES, 50_000, 48, np.random.default_rng(5), path=season)
    blind = estimate_shocks(rows_of(cube), STATES).summary
    seeing = estimate_shocks(rows_of(cube), STATES, cycle_position=lambda t: t % 12).summary
    assert blind["exit_sd"][0] > 0.12 and seeing["exit_sd"][0] < 0.03
    short = estimate_shocks(rows_of(cube[:20]), STATES, cycle_position=lambda t: t % 12)
    assert "seasons_kept" in short.notes


def test_short_histories_say_so_and_the_shortest_are_refused():
    cube = shocked_cube(CHAIN, STATES, 50_000, 12, np.random.default_rng(1), exit_sd=0.2)
    assert estimate_shocks(rows_of(cube), STATES).notes == ("short_history",)
    with pytest.raises(NotIdentified, match="cannot be told from 5 periods of moves; 6 are the least"):
        estimate_shocks(rows_of(cube[:5]), STATES)
    with pytest.raises(NotIdentified, match="No state has two destinations with 20 moves"):
        estimate_shocks(rows_of(np.minimum(cube, 1)), STATES)


def test_record_manners():
    cube = shocked_cube(CHAIN, STATES, 5_000, 24, np.random.default_rng(2), exit_sd=0.2)
    shocks = estimate_shocks(rows_of(cube, first=7), STATES)
    assert shocks.posterior.shape == (len(PERSISTENCES), len(SIZES), len(SIZES))
    assert shocks.posterior.sum() == pytest.approx(1) and shocks.first == 7
    frame = shocks.to_frame()
    assert frame["parameter"].tolist() == ["persistence", "cell_sd", "exit_sd"]
    assert (frame["low"] <= frame["high"]).all() and "shocks over 24 periods" in repr(shocks)
