"""The record of a comparison: table, payback, manners."""

import json

import numpy as np
import pytest

from cohortflow.whatif import Change, Scenario, what_if
from cohortflow.whatif.compare import Pair, limits, payback
from tests.projector_cases import CHAIN
from tests.whatif_cases import JOINERS, MONEY, START, draws_of_chain

PLAN = Scenario("keep them", Change("steady", "left", add=-0.04), cost_per_customer=0.05, case="high")


def found(**more):
    return what_if(
        CHAIN, PLAN, periods=3, start=START, joiners=JOINERS, value=MONEY, base_period="2026-09", **more
    )


def test_the_table_has_the_contracts_columns_and_rows():
    frame = found(draws=draws_of_chain(30)).to_frame()
    assert list(frame.columns) == [
        "segment", "scenario", "period", "quantity", "base", "with_change", "difference", "low", "high", "cost", "net",
    ]  # fmt: skip
    assert list(frame["period"].unique()) == ["2026-10", "2026-11", "2026-12", "total", "settled"]
    assert set(frame.loc[frame["period"] == "total", "quantity"]) == {
        "value", "cost", "net", "break_even_cost", "payback_periods",
    }  # fmt: skip
    assert (frame["difference"] - (frame["with_change"] - frame["base"])).abs().max() < 1e-9
    value = frame[frame["quantity"] == "value"].set_index("period")
    cost = frame[frame["quantity"] == "cost"].set_index("period")["with_change"]
    assert value["cost"].to_numpy() == pytest.approx(cost.to_numpy())
    assert value["net"].to_numpy() == pytest.approx((value["difference"] - cost).to_numpy())
    assert frame.loc[frame["quantity"] != "value", ["cost", "net"]].isna().all().all()
    assert (frame["scenario"] == "keep them").all() and (frame["segment"] == "all").all()


def test_without_draws_there_are_no_limits_and_outside_a_calendar_periods_are_counted():
    record = what_if(CHAIN, PLAN, periods=2, start=START, value=MONEY)
    frame = record.to_frame()
    assert frame["low"].isna().all() and record.method == "none"
    assert list(frame["period"].unique()) == ["1", "2", "total", "settled"]


def test_record_manners():
    record = found(draws=draws_of_chain(30))
    assert repr(record).startswith('<what if "keep them": all_live +') and "net +" in repr(record)
    assert json.loads(json.dumps(record.to_dict()))["about"]["case"] == "high"
    assert record.at_horizon("steady").difference == pytest.approx(record.by_period["steady"].difference[-1])
    with pytest.raises(TypeError):
        record.by_period["steady"] = None


def test_payback_counts_from_the_scenarios_start_and_must_last():
    # sums from step 1: -3, -1, +2 -> the third period; and one that falls back below 0 has not paid
    net = np.array([[0, -3.0, 2, 3], [0, 1, -2.0, 0.5], [0, 0, 0, 0], [0, 2, -1, -1]])
    assert payback(net.T, 1).tolist() == [3, np.inf, 1, 1]


def test_pairs():
    drawn = np.random.default_rng(2).normal(size=(3, 4, 200))
    assert limits(drawn, 0.9) == pytest.approx(np.quantile(drawn, [0.05, 0.95], axis=-1), abs=1e-12)
    drawn[1, 2, 7] = np.nan
    assert np.isnan(limits(drawn, 0.9)).sum() == 2
    assert limits(np.array([[4.0]]), 0.9).ravel().tolist() == [4, 4]
    assert limits(np.array([[1.0, 2.0, np.inf]]), 0.5).ravel().tolist() == [1.5, np.inf]
    pair = Pair(np.array([1.0, np.nan]), np.array([3.0, 4.0]), lambda: np.arange(10.0).reshape(2, 5), 0.5)
    assert pair.low[0] == 1 and pair.high[0] == 3 and np.isnan(pair.low[1])
    assert Pair(1.0, 2.0, None, 0.5).difference == 1.0 and np.isnan(Pair(1.0, 2.0, None, 0.5).low)
