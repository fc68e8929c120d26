"""Draws of a comparison: figures made when asked for, and once."""

import numpy as np
import pytest

from cohortflow.whatif.change import Change
from cohortflow.whatif.scattered import Scattered
from cohortflow.whatif.scenario import Scenario
from cohortflow.whatif.setting import Setting
from tests.projector_cases import CHAIN, STATES
from tests.whatif_cases import JOINERS, MONEY, START, draws_of_chain


def test_figures_of_every_kind():
    plan = Scenario("keep", Change("steady", "left", multiply=0.5), cost_per_customer=0.5)
    at = Setting.of(CHAIN, plan, periods=4, start=START, joiners=JOINERS, value=MONEY, base_period=None)
    weights = {"steady": np.eye(5)[1], "all_live": STATES.live_mask.astype(float)}
    found = Scattered.of(at, weights, draws_of_chain(25), np.random.default_rng(1))
    assert found.by_period("all_live") == pytest.approx(found.gains.counts[:, :2].sum(axis=1))
    assert np.shares_memory(found.by_period("steady"), found.gains.counts)
    value, cost, net = (found.by_period(name) for name in ("value", "cost", "net"))
    assert net == pytest.approx(value - cost) and found.total("net") == pytest.approx(net.sum(axis=0))
    assert value == pytest.approx(at.discount[:, None] * found.gains.paid)
    assert found.late is found.late  # settled once
    first, second = found.late
    assert found.settled("all_live") == pytest.approx((second.counts - first.counts)[:2].sum(axis=0))
    assert found.settled("net") == pytest.approx(second.paid - first.paid - 0.5 * second.treated)
