"""The projection: table, totals, bands, parts, draws of a Fit, what is refused."""

import time
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

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
    chains,
    dirichlet_draws,
    tally_of_stays,
)

BASE = {"fresh": 40, "steady": 300, "paused": 60}


def fit_like(size=800, tally=None):
    """What the projector needs to know of a Fit."""

    def draws(n, *, rng, covariance="customer"):
        return Draws.of_matrices(CHAIN.schedule, [dirichlet_draws(P, size, n, seed=int(rng.integers(1e6)))[:, None]])

    return SimpleNamespace(schedule=CHAIN.schedule, draws=draws, tally=tally, P=P)


def test_share_projection_of_beasley_through_the_table():
    # Beasley, OR-Notes: (.25, .75) -> (.3325, .6675) -> (.392725, .607275)  (VERIFIED)
    chain = Chain(States(["ours", "theirs"]), [[0.88, 0.12], [0.15, 0.85]])
    frame = project(chain, start=[0.25, 0.75], periods=2).to_frame().set_index(["state", "periods_ahead"])
    assert frame.loc[("ours", 1), "share"] == pytest.approx(0.3325, abs=1e-15)
    assert frame.loc[("theirs", 2), "customers"] == pytest.approx(0.607275, abs=1e-15)


def test_rows_and_columns_of_the_contract():
    found = project(CHAIN, start=BASE, periods=3, totals={"boxes": ["fresh", "steady"]}, base_period="2026-09",
                    joiners={"fresh": 20}, draws=200)  # fmt: skip
    frame = found.to_frame()
    assert frame.columns.tolist() == [
        "segment", "period", "periods_ahead", "state", "customers", "low", "high", "share", "share_low",
        "share_high", "level",
    ]  # fmt: skip
    assert frame["state"].unique().tolist() == ["fresh", "steady", "paused", "all_live", "boxes", "left", "lapsed"]
    assert frame["period"].tolist()[:4] == ["2026-09", "2026-10", "2026-11", "2026-12"]
    opening = frame[frame["periods_ahead"] == 0]
    assert (opening["low"] == opening["customers"]).all() and (opening["high"] == opening["customers"]).all()
    inside = frame[(frame["low"] - 1 <= frame["customers"]) & (frame["customers"] <= frame["high"] + 1)]
    assert len(inside) == len(frame)
    assert found.about() == {
        "level": 0.9, "parts": ["chance", "joiners"], "draws": 200, "base_period": "2026-09",
        "joiners": "planned", "reasons": [],
    }  # fmt: skip
    assert "projection of 3 periods (month): all_live 340 to" in repr(found)


def test_totals_and_shares_by_hand():
    frame = project(CHAIN, start=BASE, periods=1).to_frame().set_index(["state", "periods_ahead"])
    # steady 40 x .8 + 300 x .8 + 60 x .5 = 302, paused 30 + 24 = 54, left 6 + 30 + 3 = 39, lapsed 2 + 3 = 5
    assert frame.loc[("all_live", 1), "customers"] == pytest.approx(302)
    assert frame.loc[("paused", 1), "share"] == pytest.approx(54 / 356)
    assert frame.loc[("left", 1), "customers"] == pytest.approx(39)
    assert frame.loc[("left", 1), "share"] == pytest.approx(39 / 400)
    assert project(CHAIN, start=BASE, periods=1).exits_lost["lapsed"].tolist() == pytest.approx([0, 5])


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


def test_states_reached_from_a_row_without_data_are_missing_and_the_rest_stands():
    gap = P.copy()
    gap[2] = np.nan
    states = States(STATES.names, exits=STATES.exits, away=STATES.away, impossible=[("paused", "lapsed")])
    found = project(Chain(states, gap), start={"steady": 100}, periods=3, draws=50)
    frame = found.to_frame().set_index(["state", "periods_ahead"])
    assert found.reasons == ("rows_without_data:paused",)
    assert frame.loc[("steady", 1), "customers"] == 80 and np.isnan(frame.loc[("steady", 2), "customers"])
    assert frame.loc[("steady", 2), ["low", "high"]].isna().all()
    assert np.isnan(found.band_parts.set_index(["quantity", "periods_ahead"]).loc[("steady", 2), "chance"])


def test_thousands_of_draws_in_well_under_a_second():
    rng = np.random.default_rng(0)
    matrix = rng.dirichlet(np.ones(8), size=8)
    matrix[6:] = np.eye(8)[6:]
    chain = Chain(States([f"s{i}" for i in range(8)], exits=["s6", "s7"]), matrix)
    begin = time.process_time()
    project(chain, start=[1000] * 6 + [0, 0], periods=24, joiners=[100] * 6 + [0, 0], draws=2000)
    assert time.process_time() - begin < 2.0  # measured .3 s; the bound leaves room for a loaded machine


@settings(max_examples=25, deadline=None)
@given(chains(), st.integers(0, 400), st.integers(1, 8))
def test_roll_forward_closes_for_every_state(chain, customers, periods):
    found = project(chain, start=[customers, 10, 0, 0], periods=periods, joiners={"s1": 7}, draws=2)
    frame = found.rollforward
    frame = frame.assign(step=frame.groupby(["state", "line", "exit"]).cumcount())
    wide = frame.groupby(["state", "step", "line"])["customers"].sum().unstack()
    closing = wide["opening"] + wide["joined"] + wide["returned"] - wide["lost"] + wide["moved_in"] - wide["moved_out"]
    np.testing.assert_allclose(wide["closing"], closing, atol=1e-9)
    later = wide["opening"].unstack().iloc[:, 1:].to_numpy()
    np.testing.assert_allclose(later, wide["closing"].unstack().iloc[:, :-1].to_numpy(), atol=1e-9)


def test_refusals():
    with pytest.raises(CallError, match='The part "rates" needs to know how uncertain the rates are'):
        project(CHAIN, start=BASE, periods=2, parts=["rates"])
    with pytest.raises(CallError, match='The part "common_shocks" needs draws of future periods'):
        project(CHAIN, start=BASE, periods=2, parts=["common_shocks"])
    shocks = Draws.of_matrices(CHAIN.schedule, [np.tile(P, (4, 2, 1, 1))], part="rates and common shocks")
    with pytest.raises(CallError, match='Draws of shocks hold the error of the rates as well'):
        project(CHAIN, start=BASE, periods=2, shocks=shocks, parts=["common_shocks"])
    with pytest.raises(CallError, match="draws is 1; it takes Draws, or a whole number of draws, at least 2"):
        project(CHAIN, start=BASE, periods=2, draws=1)
    other = planned_numbers(States(["a", "gone"], exits=["gone"]), {"a": 1}, periods=2)
    with pytest.raises(CallError, match="The joiners and the model have different states"):
        project(CHAIN, start=BASE, periods=2, joiners=other)
    late = planned_numbers(STATES, {"fresh": 1}, periods=2, calendar=MONTHS, base=SEPTEMBER + 1)
    with pytest.raises(CallError, match="The joiners are forecast from 2026-10, the base is counted in 2026-09"):
        project(CHAIN, start=BASE, periods=2, joiners=late, base_period="2026-09")
