"""Compensated slopes: every model's own changes, made in small, are the oracle."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CohortflowError
from cohortflow.states import States
from cohortflow.whatif.change import PROPORTIONAL, Change, changed
from cohortflow.whatif.effects import effects
from cohortflow.whatif.slopes import slopes
from cohortflow.whatif.target import resolve
from tests.projector_cases import CHAIN, SEPTEMBER, STATES, P, chains
from tests.whatif_cases import JOINERS, MONEY, START, models

SMALL = 1e-6


def by_change(target, schedule, origin, to, balance):
    """Central difference of the target under the change itself, another route than any derivative."""
    ends = []
    for d in (SMALL, -SMALL):
        try:
            ends.append(slopes(target, changed(schedule, Change(origin, to, add=d, balance=balance))).value)
        except CohortflowError:
            return None
    return (ends[0] - ends[1]) / (2 * SMALL)


@pytest.mark.parametrize("case", models(), ids=lambda c: c[0])
@pytest.mark.parametrize(
    "name, horizon", [("base", 5), ("settled_base", None), ("life", None), ("value", None)]
)
def test_every_models_slopes_are_those_of_its_changes(case, name, horizon):
    _, schedule, live, gone, start, joiners = case
    money = {"per_period": {live: 20.0}, "discount_rate": 0.1}
    target = resolve(
        schedule, name, horizon=horizon, start=start, joiners=joiners, value=money, base_period=SEPTEMBER
    )
    found = effects(target, schedule, PROPORTIONAL)
    checked = 0
    for origin in schedule.states.remaining:
        for to in schedule.states.names:
            expected = by_change(target, schedule, origin, to, PROPORTIONAL)
            if expected is None:
                continue
            got = found.slope[schedule.states.index(origin), schedule.states.index(to)]
            assert got == pytest.approx(expected, rel=1e-5, abs=1e-5 * abs(found.value)), (origin, to)
            checked += 1
    assert checked >= 2


def test_a_named_balance():
    target = resolve(CHAIN, "life:steady")
    found = effects(target, CHAIN.schedule, ("left", "lapsed"))
    expected = by_change(target, CHAIN.schedule, "paused", "steady", ["left", "lapsed"])
    assert found.slope[2, 1] == pytest.approx(expected, rel=1e-5)
    assert np.isnan(found.slope[:, 3:]).all()  # the balance itself is no lever
    assert np.isnan(
        effects(target, CHAIN.schedule, ("lapsed",)).slope[1]
    ).all()  # steady has no lapsed to pay with


def test_by_hand():
    # life of `here` is 1/q; one unit more of leaving: -1/q^2 = -100; elasticity q (-1/q^2) / (1/q) = -1
    chain = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    found = effects(resolve(chain, "life:here"), chain.schedule, PROPORTIONAL)
    assert found.slope[0] == pytest.approx([100, -100]) and found.elasticity[0] == pytest.approx([9, -1])
    assert np.isnan(found.slope[1]).all()


def test_elasticity_of_several_rows_multiplies_each():
    _, schedule, live, gone, start, _ = models()[3]
    target = resolve(schedule, "base", horizon=4, start=start)
    found = effects(target, schedule, PROPORTIONAL)
    ends = [
        slopes(target, changed(schedule, Change(live, gone, multiply=1 + d))).value for d in (SMALL, -SMALL)
    ]
    assert found.elasticity[0, 1] == pytest.approx((ends[0] - ends[1]) / (2 * SMALL) / found.value, rel=1e-6)


def test_no_slope_where_there_is_no_move():
    states = States(STATES.names, exits=STATES.exits, impossible=[("steady", "lapsed")])
    chain = Chain(states, P)
    slope = effects(resolve(chain, "life:steady"), chain.schedule, PROPORTIONAL).slope
    assert np.isnan(slope[1, 4]) and np.isnan(slope[3:]).all() and np.isfinite(slope[0]).all()
    rows = P.copy()
    rows[0] = np.nan
    slope = effects(resolve(Chain(STATES, rows), "base", horizon=2, start={"steady": 1}), Chain(STATES, rows).schedule,
                    PROPORTIONAL).slope  # fmt: skip
    assert np.isnan(slope[0]).all() and np.isfinite(slope[1, 3])


def test_unseen_moves_have_the_slope_of_where_they_land():
    _, schedule, live, gone, start, joiners = models()[3]
    target = resolve(schedule, "settled_base", joiners=joiners)
    assert np.isfinite(effects(target, schedule, PROPORTIONAL).slope[0]).all()
    assert MONEY and JOINERS and START and chains
