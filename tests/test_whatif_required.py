"""The change that a target needs: closed forms, limits of reach, dates, costs, draws."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.states import States
from cohortflow.whatif import Change, Scenario, changed, required_change, sensitivity, what_if
from tests.projector_cases import CHAIN, P, chains, dirichlet_draws, seasonal
from tests.whatif_cases import JOINERS, MONEY, OTHER, START, draws_of_chain

HERE = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])


def test_closed_forms():
    # life 1/q = 16 needs q = 1/16; settled base 10/q = 80 needs q = 1/8; base 100 (1-q)^3 = 64 needs
    # q = 1 - .64^(1/3)
    assert required_change(HERE, ("here", "gone"), target="life:here", reach=16).add == pytest.approx(
        1 / 16 - 0.1
    )
    found = required_change(HERE, ("here", "gone"), target="settled_base", reach=80, joiners={"here": 10})
    assert found.add == pytest.approx(0.025) and found.now == pytest.approx(100) and found.probability == 0.1
    found = required_change(HERE, ("here", "gone"), target="base", horizon=3, start={"here": 100}, reach=64)
    assert found.add == pytest.approx(1 - 0.64 ** (1 / 3) - 0.1, abs=1e-12)
    assert required_change(HERE, ("here", "gone"), target="life:here", reach=10).add == pytest.approx(
        0, abs=1e-15
    )


@settings(max_examples=25, deadline=None)
@given(chain=chains(), share=st.floats(0.1, 0.9), up=st.booleans())
def test_what_is_found_reaches_the_mark_and_nothing_smaller_does(chain, share, up):
    end = (1 - chain.matrix[0, 1]) if up else -chain.matrix[0, 1]
    start = {"s0": 50, "s1": 50}
    moved = what_if(chain, Change("s0", "s1", add=share * end), periods=4, start=start)
    mark = moved.at_horizon("s1").changed
    if abs(moved.at_horizon("s1").difference) < 1e-6:
        return
    found = required_change(chain, ("s0", "s1"), target="base:s1", horizon=4, start=start, reach=mark)
    assert abs(found.add) <= abs(share * end) + 1e-9
    again = what_if(chain, Change("s0", "s1", add=found.add), periods=4, start=start)
    assert again.at_horizon("s1").changed == pytest.approx(mark)


def test_what_cannot_be_reached_says_how_far_it_goes():
    # even if nobody leaves after the first period on: 100 stay; at most 100
    found = required_change(HERE, ("here", "gone"), target="base", horizon=2, start={"here": 100}, reach=120)
    assert not found.reached and np.isnan(found.add)
    assert found.most == pytest.approx(100) and found.most_at == pytest.approx(-0.1)
    assert 'cannot be brought to 120 by "here" to "gone": the most is 100' in repr(found)
    assert found.to_frame()["reached"].tolist() == [False]


def test_a_life_without_end_is_approached_but_not_made():
    found = required_change(HERE, ("here", "gone"), target="life:here", reach=1e6)
    assert found.add == pytest.approx(1e-6 - 0.1) and found.most > 1e7


def test_dated_changes():
    lever = Change("steady", "left", add=0.0, starts="2026-11")
    mark = what_if(
        CHAIN, lever.resized(-0.03), periods=6, start=START, joiners=JOINERS, base_period="2026-09"
    )
    given = {"start": START, "joiners": JOINERS, "base_period": "2026-09"}
    found = required_change(
        CHAIN, lever, target="base", horizon=6, reach=mark.at_horizon("all_live").changed, **given
    )
    assert found.add == pytest.approx(-0.03)
    found = required_change(
        CHAIN, lever, target="settled_base", reach=mark.settled["all_live"].changed, **given
    )
    assert found.add == pytest.approx(-0.03)
    season = seasonal([P, OTHER])
    mark = what_if(season, lever.resized(-0.03), periods=6, start=START, base_period="2026-09")
    found = required_change(season, lever, target="base", horizon=6, start=START, base_period="2026-09",
                            reach=mark.at_horizon("all_live").changed)  # fmt: skip
    assert found.add == pytest.approx(-0.03) and np.isnan(found.probability)
    with pytest.raises(CallError, match='A dated change and "life:steady" do not go together'):
        required_change(CHAIN, lever, target="life:steady", reach=20, **given)


def test_the_smallest_change_that_pays():
    given = {"start": START, "value": MONEY, "joiners": JOINERS}
    found = required_change(
        CHAIN, ("paused", "steady"), target="net", horizon=8, cost_per_customer=1.0, **given
    )
    plan = Scenario("x", Change("paused", "steady", add=found.add), cost_per_customer=1.0)
    again = what_if(CHAIN, plan, periods=8, **given)
    assert again.total["net"].difference == pytest.approx(0, abs=1e-7)
    assert again.total["break_even_cost"].changed == pytest.approx(1.0)
    assert found.target == "net" and found.now < 0


def test_draws_give_limits_and_the_chance_to_reach_it():
    # q ~ Beta around .1: the change needed for life 16 is 1/16 - q, draw by draw
    drawn = dirichlet_draws(HERE.matrix, 200, 80)
    draws = Draws.of_matrices(HERE.schedule, [drawn[:, None]])
    found = required_change(HERE, ("here", "gone"), target="life:here", reach=16, draws=draws, level=0.8)
    needed = np.minimum(1 / 16 - drawn[:, 0, 1], 0)
    assert (found.low, found.high) == pytest.approx(
        tuple(np.quantile(needed, [0.1, 0.9], method="inverted_cdf"))
    )
    assert found.chance == 1
    far = required_change(
        CHAIN,
        ("paused", "steady"),
        target="base",
        horizon=3,
        start=START,
        reach=180,
        draws=draws_of_chain(40),
    )
    assert far.reached and 0 < far.chance < 1 and far.high == np.inf


def test_arguments():
    with pytest.raises(CallError, match='say which number the target "life:here" is to reach'):
        required_change(HERE, ("here", "gone"), target="life:here")
    with pytest.raises(CallError, match='"net" sums over a horizon'):
        required_change(HERE, ("here", "gone"), target="net", value=MONEY)
    with pytest.raises(CallError, match='"net" is about money: pass value='):
        required_change(HERE, ("here", "gone"), target="net", horizon=3)
    found = required_change(HERE, ("here", "gone"), target="life:here", reach=20)
    assert 'needs "here" to "gone" -5 points' in repr(found) and found.about()["reached"] is True


def test_value_targets_are_walked_or_solved_the_same():
    given = {"start": START, "joiners": JOINERS, "value": MONEY}
    for name, horizon in (("value:total", 6), ("value:base", 6), ("value:joiners", 6), ("value", None)):
        now = sensitivity(CHAIN, target=name, horizon=horizon, **given).value
        found = required_change(
            CHAIN, ("steady", "left"), target=name, horizon=horizon, reach=1.02 * now, **given
        )
        assert found.now == pytest.approx(now) and found.add < 0
        better = changed(CHAIN.schedule, Change("steady", "left", add=found.add))
        again = sensitivity(better, target=name, horizon=horizon, **given).value
        assert again == pytest.approx(1.02 * now)
