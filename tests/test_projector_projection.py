"""The record of a projection: rows of the contract, totals, shares, roll-forward."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain
from cohortflow.projector.project import project
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    chains,
)

BASE = {"fresh": 40, "steady": 300, "paused": 60}


def test_rows_and_columns_of_the_contract():
    found = project(CHAIN, start=BASE, periods=3, totals={"boxes": ["fresh", "steady"]},
                    base_period="2026-09", joiners={"fresh": 20}, draws=200)  # fmt: skip
    frame = found.to_frame()
    assert frame.columns.tolist() == [
        "segment", "period", "periods_ahead", "state", "customers", "low", "high", "share", "share_low",
        "share_high", "level",
    ]  # fmt: skip
    assert frame["state"].unique().tolist() == [
        "fresh",
        "steady",
        "paused",
        "all_live",
        "boxes",
        "left",
        "lapsed",
    ]
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


@settings(max_examples=25, deadline=None)
@given(chains(), st.integers(0, 400), st.integers(1, 8))
def test_roll_forward_closes_for_every_state(chain, customers, periods):
    found = project(chain, start=[customers, 10, 0, 0], periods=periods, joiners={"s1": 7}, draws=2)
    frame = found.rollforward
    frame = frame.assign(step=frame.groupby(["state", "line", "exit"]).cumcount())
    wide = frame.groupby(["state", "step", "line"])["customers"].sum().unstack()
    closing = (
        wide["opening"]
        + wide["joined"]
        + wide["returned"]
        - wide["lost"]
        + wide["moved_in"]
        - wide["moved_out"]
    )
    np.testing.assert_allclose(wide["closing"], closing, atol=1e-9)
    later = wide["opening"].unstack().iloc[:, 1:].to_numpy()
    np.testing.assert_allclose(later, wide["closing"].unstack().iloc[:, :-1].to_numpy(), atol=1e-9)
