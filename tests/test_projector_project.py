"""The projection: table, totals, bands, parts, draws of a Fit, what is refused."""

import time
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.projector.joiners import planned_numbers
from cohortflow.projector.project import project
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    MONTHS,
    SEPTEMBER,
    STATES,
    P,
    dirichlet_draws,
    tally_of_stays,
)

BASE = {"fresh": 40, "steady": 300, "paused": 60}


def fit_like(size=800, tally=None):
    """What the projector needs to know of a Fit."""

    def draws(n, *, rng, covariance="customer"):
        return Draws.of_matrices(
            CHAIN.schedule, [dirichlet_draws(P, size, n, seed=int(rng.integers(1e6)))[:, None]]
        )

    return SimpleNamespace(schedule=CHAIN.schedule, draws=draws, tally=tally, P=P)


def test_share_projection_of_beasley_through_the_table():
    # Beasley, OR-Notes: (.25, .75) -> (.3325, .6675) -> (.392725, .607275)  (VERIFIED)
    chain = Chain(States(["ours", "theirs"]), [[0.88, 0.12], [0.15, 0.85]])
    frame = project(chain, start=[0.25, 0.75], periods=2).to_frame().set_index(["state", "periods_ahead"])
    assert frame.loc[("ours", 1), "share"] == pytest.approx(0.3325, abs=1e-15)
    assert frame.loc[("theirs", 2), "customers"] == pytest.approx(0.607275, abs=1e-15)


def test_chance_band_of_one_binomial():
    # 400 customers, each kept with .9: nominal 90 % band = binomial quantiles 350 .. 370 (scipy.stats.binom)
    from scipy import stats

    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    frame = project(chain, start={"in": 400}, periods=1, draws=20_000).to_frame()
    row = frame[(frame["state"] == "in") & (frame["periods_ahead"] == 1)].iloc[0]
    assert [row["low"], row["high"]] == pytest.approx(stats.binom.ppf([0.05, 0.95], 400, 0.9), abs=1)


def test_parts_of_the_band_add_up_and_switch_off():
    model = fit_like(size=200)
    whole = project(model, start=BASE, periods=4, joiners={"fresh": 20}, draws=3000)
    assert whole.parts == ("rates", "chance", "joiners")
    parts = whole.band_parts.set_index(["quantity", "periods_ahead"]).loc[("all_live", 4)]
    assert parts["total"] == pytest.approx(parts[["rates", "chance", "common_shocks", "joiners"]].sum())
    assert parts["common_shocks"] == 0
    # the exact sum agrees with what was simulated (3,000 draws: about 5 % either way)
    assert whole.paths("all_live")[:, 4].var() == pytest.approx(parts["total"], rel=0.12)
    only = project(model, start=BASE, periods=4, joiners={"fresh": 20}, parts=["chance"], draws=3000)
    assert only.band_parts.set_index(["quantity", "periods_ahead"]).loc[("all_live", 4), "rates"] == 0
    assert only.paths("all_live")[:, 4].var() == pytest.approx(parts["chance"], rel=0.12)


def test_shocks_take_the_place_of_the_rates_draws_and_are_told_apart():
    rates = dirichlet_draws(P, 400, 1000, seed=2)
    rng = np.random.default_rng(3)
    future = np.repeat(rates[:, None], 3, axis=1)
    worse = np.exp(0.3 * rng.standard_normal((1000, 3, 1, 1)))
    future[:, :, :3, 3:] *= worse
    future /= future.sum(axis=-1, keepdims=True)
    shocks = Draws.of_matrices(CHAIN.schedule, [future], part="rates and common shocks")
    found = project(CHAIN, start=BASE, periods=3, draws=Draws.of_matrices(CHAIN.schedule, [rates[:, None]]),
                    shocks=shocks)  # fmt: skip
    assert found.parts == ("rates", "chance", "common_shocks")
    parts = found.band_parts.set_index(["quantity", "periods_ahead"]).loc[("all_live", 3)]
    assert parts["common_shocks"] > parts["rates"] > 0
    assert found.paths("all_live")[:, 3].var() == pytest.approx(parts["total"], rel=0.2)


def test_a_fit_brings_opening_calendar_and_draws():
    stays = [("joined", "", [(p, "steady") for p in range(1, 7)])] * 5
    tally = tally_of_stays([*stays, ("joined", "", [(5, "fresh"), (6, "steady")])])
    found = project(fit_like(tally=tally), periods=2, draws=50)
    assert found.mean[0].tolist() == [0, 6, 0, 0, 0] and found.base_period == 6
    assert found.labels == [MONTHS.label(p) for p in (6, 7, 8)]  # the model's own calendar names the periods
    assert found.simulated.shape == (50, 3, 5) and found.parts == ("rates", "chance")


def test_the_same_seed_the_same_table():
    one, two = (project(fit_like(), start=BASE, periods=3, rng=9, draws=100).to_frame() for _ in range(2))
    pd.testing.assert_frame_equal(one, two)
    other = project(fit_like(), start=BASE, periods=3, rng=10, draws=100).to_frame()
    assert not one["low"].equals(other["low"])


def test_thousands_of_draws_in_well_under_a_second():
    rng = np.random.default_rng(0)
    matrix = rng.dirichlet(np.ones(8), size=8)
    matrix[6:] = np.eye(8)[6:]
    chain = Chain(States([f"s{i}" for i in range(8)], exits=["s6", "s7"]), matrix)
    begin = time.process_time()
    project(chain, start=[1000] * 6 + [0, 0], periods=24, joiners=[100] * 6 + [0, 0], draws=2000)
    assert time.process_time() - begin < 2.0  # measured .3 s; the bound leaves room for a loaded machine


def test_refusals():
    with pytest.raises(CallError, match='The part "rates" needs to know how uncertain the rates are'):
        project(CHAIN, start=BASE, periods=2, parts=["rates"])
    with pytest.raises(CallError, match='The part "common_shocks" needs draws of future periods'):
        project(CHAIN, start=BASE, periods=2, parts=["common_shocks"])
    shocks = Draws.of_matrices(CHAIN.schedule, [np.tile(P, (4, 2, 1, 1))], part="rates and common shocks")
    with pytest.raises(CallError, match="Draws of shocks hold the error of the rates as well"):
        project(CHAIN, start=BASE, periods=2, shocks=shocks, parts=["common_shocks"])
    with pytest.raises(CallError, match="draws is 1; it takes Draws, or a whole number of draws, at least 2"):
        project(CHAIN, start=BASE, periods=2, draws=1)
    other = planned_numbers(States(["a", "gone"], exits=["gone"]), {"a": 1}, periods=2)
    with pytest.raises(CallError, match="The joiners and the model have different states"):
        project(CHAIN, start=BASE, periods=2, joiners=other)
    late = planned_numbers(STATES, {"fresh": 1}, periods=2, calendar=MONTHS, base=SEPTEMBER + 1)
    with pytest.raises(
        CallError, match="The joiners are forecast from 2026-10, the base is counted in 2026-09"
    ):
        project(CHAIN, start=BASE, periods=2, joiners=late, base_period="2026-09")
