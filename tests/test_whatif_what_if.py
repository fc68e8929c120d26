"""What-ifs against plain loops, published figures and hand sums; every kind of model, date, cost and
price.
"""

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.projector import planned_numbers, project, value
from cohortflow.states import States
from cohortflow.whatif import Change, Scenario, what_if
from tests.projector_cases import CHAIN, SEPTEMBER, STATES, P, dirichlet_draws, seasonal
from tests.whatif_cases import (
    JOINERS,
    MONEY,
    OTHER,
    START,
    amounts,
    draws_of_chain,
    fit_like,
    loop,
    models,
    shift,
)

KEEP = Change("steady", "left", add=-0.04)
OPEN = np.array([40.0, 200, 30, 0, 0])
JOIN = np.array([25.0, 5, 0, 0, 0])


def test_by_hand():
    # two states, keep .9 -> .95 of 100: 95, 90.25 instead of 90, 81; each here pays 2 at the period's start
    states = States(["here", "gone"], exits=["gone"])
    chain = Chain(states, [[0.9, 0.1], [0, 1]])
    plan = Scenario("keep", Change("here", "gone", add=-0.05), cost_per_customer=0.1, fixed_cost=1.0)
    money = {"per_period": {"here": 2.0}, "timing": "start"}
    found = what_if(chain, plan, periods=2, start={"here": 100}, value=money)
    assert found.by_period["here"].changed == pytest.approx([95, 90.25])
    assert found.by_period["gone"].base == pytest.approx([10, 19])
    assert found.by_period["value"].base == pytest.approx([200, 180])
    assert found.by_period["cost"].changed == pytest.approx([11, 10.5])  # .1 x 100 + 1, .1 x 95 + 1
    assert found.by_period["net"].difference == pytest.approx([-11, 190 - 180 - 10.5])
    assert found.total["net"].difference == pytest.approx(-11.5)
    # (10 - 2) / (100 + 95)
    assert found.total["break_even_cost"].changed == pytest.approx(8 / 195)
    assert found.total["payback_periods"].changed == np.inf


@pytest.mark.parametrize(
    "name, schedule, live, gone, start, joiners", models(), ids=lambda v: v if isinstance(v, str) else ""
)
def test_every_kind_of_model_equals_the_projection_of_the_changed_model(
    name, schedule, live, gone, start, joiners
):
    from cohortflow.whatif import changed

    change = Change(live, gone, multiply=0.5)
    found = what_if(schedule, change, periods=7, start=start, joiners=joiners, base_period=SEPTEMBER)
    for side, model in (("base", schedule), ("changed", changed(schedule, change))):
        ahead = project(model, periods=7, start=start, joiners=joiners, base_period=SEPTEMBER, draws=2)
        for state in schedule.states.names:
            got = getattr(found.by_period[state], side)
            assert got == pytest.approx(ahead.expected(state)[1:], rel=1e-12), (name, state)


@pytest.mark.parametrize("starts, ends, acting", [
    (None, None, range(6)), ("2026-12", None, [2, 3, 4, 5]), (None, "2026-11", [0, 1]),
    ("2026-11", "2027-01", [1, 2, 3]),
])  # fmt: skip
@pytest.mark.parametrize("season", [False, True])
def test_dated_changes_against_a_plain_loop(starts, ends, acting, season):
    # step h leads from the end of September + h to the next month: h = 0 is October
    stacks = [P, OTHER, P] if season else [P]
    model = seasonal(stacks) if season else CHAIN
    plan = Scenario("keep", KEEP, starts=starts, ends=ends, cost_per_customer=0.5, fixed_cost=3.0)
    found = what_if(model, plan, periods=6, start=START, joiners=JOINERS, value=MONEY, base_period="2026-09")
    factor = 1.1 ** (-(np.arange(6) + 0.5) / 12)
    base, under = [stacks[h % len(stacks)] for h in range(6)], []
    for h, matrix in enumerate(base):
        new = matrix.copy()
        if h in acting:
            new[1] = shift(matrix[1], 3, -0.04)
        under.append(new)
    inflow, reward = [JOIN] * 6, [amounts()] * 6
    counts, paid = loop(base, OPEN, inflow, reward, factor)
    changed, more = loop(under, OPEN, inflow, reward, factor)
    on = np.isin(np.arange(6), list(acting))
    cost = factor * on * (0.5 * changed[:-1, 1] + 3.0)
    for k, state in enumerate(STATES.names):
        assert found.by_period[state].base == pytest.approx(counts[1:, k])
        assert found.by_period[state].changed == pytest.approx(changed[1:, k])
    assert found.by_period["value"].base == pytest.approx(paid)
    assert found.by_period["value"].changed == pytest.approx(more)
    assert found.by_period["cost"].changed == pytest.approx(cost)
    assert found.total["net"].difference == pytest.approx((more - paid - cost).sum())


def test_prices_and_joiners_in_their_periods():
    plan = Scenario(
        "dearer", joiners_multiply=0.5, joiners_mix={"steady": 1.0}, per_period={"steady": 22.0},
        starts="2026-11", ends="2026-12",
    )  # fmt: skip
    found = what_if(CHAIN, plan, periods=4, start=START, joiners=JOINERS, value=MONEY, base_period="2026-09")
    new = [0, 15.0, 0, 0, 0]  # half of 30, all of them steady
    dear = amounts()
    dear[:, 1] += 1.0
    dear[1, :] += 1.0
    factor = 1.1 ** (-(np.arange(4) + 0.5) / 12)
    counts, paid = loop([P] * 4, OPEN, [JOIN, new, new, JOIN], [amounts(), dear, dear, amounts()], factor)
    assert found.by_period["steady"].changed == pytest.approx(counts[1:, 1])
    assert found.by_period["value"].changed == pytest.approx(paid)
    assert found.total["net"].difference == pytest.approx(paid.sum() - found.total["value"].base)
    assert "break_even_cost" not in found.total and "payback_periods" not in found.total


def test_returners_are_not_joiners():
    coming = planned_numbers(STATES, {"fresh": 20}, returned={"steady": 10}, periods=3, base=SEPTEMBER)
    found = what_if(
        CHAIN,
        Scenario("more", joiners_multiply=2.0),
        periods=3,
        start=START,
        joiners=coming,
        base_period=SEPTEMBER,
    )
    other = project(CHAIN, periods=3, start=START, joiners={"fresh": 40, "steady": 10}, draws=2)
    assert found.by_period["all_live"].changed == pytest.approx(other.expected("all_live")[1:])


def test_value_over_the_horizon_is_that_of_the_value_record():
    # without joiners, the summed contributions of the base are V(base) of `value` for the same horizon
    worth = value(CHAIN, horizon=9, start=START, **MONEY)
    found = what_if(CHAIN, KEEP, periods=9, start=START, value=worth)
    assert found.total["value"].base == pytest.approx(worth.sums["base"][0], rel=1e-12)
    assert found.currency == "GBP"


def test_recency_ladder_for_ever():
    # Pfeifer & Carraway (2000), J. Interactive Marketing 14(2): V for ever from recency 1 52.320 (MEMORY; recomputed
    # 52.31960944), p .3 .2 .15 .05, 36 on buying, -4 a mailing, d = .2. Changing p_1 to .4: solved by exact fractions
    # of I - P/1.2, by another route (mpmath) than this package takes.
    import mpmath

    ladder = [
        [0.3, 0.7, 0, 0, 0],
        [0.2, 0, 0.8, 0, 0],
        [0.15, 0, 0, 0.85, 0],
        [0.05, 0, 0, 0, 0.95],
        [0, 0, 0, 0, 1],
    ]
    names = ["r1", "r2", "r3", "r4", "gone"]
    chain = Chain(States(names, exits=["gone"]), ladder, period="year")
    money = {
        "per_period": dict(zip(names[:4], [36.0, -4, -4, -4], strict=True)), "discount_rate": 0.2, "timing": "start",
    }  # fmt: skip
    found = what_if(chain, Change("r1", "r1", set=0.4), periods=200, start={"r1": 1}, value=money)
    better = [[0.4, 0.6, 0, 0, 0], *ladder[1:]]
    reward = mpmath.matrix([36, -4, -4, -4, 0])
    exact = []
    for rows in (ladder, better):
        system = mpmath.matrix(
            [[(i == j) - mpmath.mpf(str(rows[i][j])) / mpmath.mpf("1.2") for j in range(5)] for i in range(5)]
        )
        exact.append(float(mpmath.lu_solve(system, reward)[0]))
    assert exact[0] == pytest.approx(52.31960944, abs=5e-9)
    assert found.total["value"].base == pytest.approx(exact[0], abs=1e-9)
    assert found.total["value"].changed == pytest.approx(exact[1], abs=1e-9)


def test_paired_draws_against_a_plain_loop():
    draws, factor = draws_of_chain(40), 1.1 ** (-(np.arange(5) + 0.5) / 12)
    plan = Scenario("keep", KEEP, cost_per_customer=0.5)
    found = what_if(CHAIN, plan, periods=5, start=START, value=MONEY, draws=draws, level=0.8)
    gains, nets = [], []
    for matrix in draws.matrices[0][:, 0]:
        new = matrix.copy()
        new[1] = shift(matrix[1], 3, -min(0.04, matrix[1, 3]))
        nothing = [np.zeros(5)] * 5
        counts, paid = loop([matrix] * 5, OPEN, nothing, [amounts()] * 5, factor)
        changed, more = loop([new] * 5, OPEN, nothing, [amounts()] * 5, factor)
        gains.append((changed - counts)[1:, STATES.live_mask].sum(axis=1))
        nets.append((more - paid - factor * 0.5 * changed[:-1, 1]).sum())
    low, high = np.quantile(gains, [0.1, 0.9], axis=0)
    assert found.by_period["all_live"].low == pytest.approx(low)
    assert found.by_period["all_live"].high == pytest.approx(high)
    assert [found.total["net"].low, found.total["net"].high] == pytest.approx(np.quantile(nets, [0.1, 0.9]))
    # what both forecasts share drops out: the difference is far better known than either
    assert high[-1] - low[-1] < 0.2 * np.ptp(np.quantile([g for g in gains], [0, 1])) + 5


def test_draws_from_a_fit_and_joiners_drawn_in_common():
    model = fit_like()
    coming = planned_numbers(STATES, JOINERS, periods=4)
    found = what_if(
        model, KEEP, periods=4, start=START, joiners=coming, draws=80, rng=3, covariance="two_way"
    )
    again = what_if(model, KEEP, periods=4, start=START, joiners=coming, draws=80, rng=3)
    assert model.asked["covariance"] == "customer" and found.draws == 80 and found.method == "draws"
    assert found.by_period["all_live"].low == pytest.approx(again.by_period["all_live"].low)
    # twice as many joiners: paired, the difference is the drawn joiners themselves after one period
    more = what_if(
        model,
        Scenario("more", joiners_multiply=2.0),
        periods=1,
        start=START,
        joiners=coming.cut(1),
        draws=400,
    )
    width = float(more.by_period["all_live"].high[0] - more.by_period["all_live"].low[0])
    assert width == pytest.approx(2 * 1.645 * np.sqrt(30), rel=0.2)  # Poisson of 30


def test_a_change_cut_short_in_draws_is_said():
    found = what_if(
        CHAIN, Change("steady", "left", add=-0.1), periods=2, start=START, draws=draws_of_chain(60)
    )
    assert any(r.startswith("change_cut_short_in_draws:0.") for r in found.reasons)


# ---- the long run ----
def test_settled_base_with_joiners_by_hand():
    # 10 join a month, keep .9: 100; keep .95: 200, losing 10 a month either way; paying 2 each at the start
    states = States(["here", "gone"], exits=["gone"])
    chain = Chain(states, [[0.9, 0.1], [0, 1]])
    money = {"per_period": {"here": 2.0}, "timing": "start"}
    plan = Scenario("keep", Change("here", "gone", add=-0.05), cost_per_customer=0.1)
    found = what_if(chain, plan, periods=2, start={"here": 50}, joiners={"here": 10}, value=money)
    assert found.settled["here"].base == pytest.approx(100) and found.settled[
        "here"
    ].changed == pytest.approx(200)
    assert found.settled["gone"].changed == pytest.approx(10)
    assert found.settled["value"].difference == pytest.approx(200)
    assert found.settled["net"].difference == pytest.approx(200 - 20)


def test_what_ends_leaves_no_mark_in_the_long_run():
    plan = Scenario("sale", KEEP, ends="2026-12", per_period={"steady": 10}, joiners_multiply=3.0)
    found = what_if(CHAIN, plan, periods=5, start=START, joiners=JOINERS, value=MONEY, base_period=SEPTEMBER)
    for pair in found.settled.values():
        assert pair.difference == pytest.approx(0, abs=1e-9)


@pytest.mark.parametrize(
    "name, schedule, live, gone, start, joiners", models(), ids=lambda v: v if isinstance(v, str) else ""
)
def test_settled_base_is_where_a_long_projection_goes(name, schedule, live, gone, start, joiners):
    change = Change(live, gone, multiply=0.6)
    found = what_if(schedule, change, periods=1800, start=start, joiners=joiners, base_period=SEPTEMBER)
    pair = found.by_period["all_live"]
    for side in ("base", "changed"):
        last_year = getattr(pair, side)[-36:].mean()  # a whole number of seasons of 3
        assert getattr(found.settled["all_live"], side) == pytest.approx(last_year, rel=1e-6), name


def test_bonus_malus_without_joiners_settles_in_its_stationary_law():
    # R markovchain vignette 6.3.1 (VERIFIED): Poisson .05, five classes, pi as printed (9 digits)
    q = np.exp(-0.05) * np.array([1, 0.05])  # no claim, one claim
    up = [[q[0], 0, q[1], 0, 1 - q[:2].sum()], [q[0], 0, 0, q[1], 1 - q[:2].sum()],
          [0, q[0], 0, 0, 1 - q[0]], [0, 0, q[0], 0, 1 - q[0]], [0, 0, 0, q[0], 1 - q[0]]]  # fmt: skip
    names = list("12345")
    chain = Chain(States(names), up, period="year")
    money = {"per_period": dict(zip(names, [0.5, 0.7, 0.9, 1, 1.25], strict=True)), "timing": "start"}
    found = what_if(chain, Change("1", "3", multiply=2), periods=1, start={"3": 1}, value=money)
    printed = [0.895836079, 0.045930498, 0.048285405, 0.005969247, 0.003978772]
    assert [found.settled[n].base for n in names] == pytest.approx(printed, abs=5e-10)
    assert found.settled["value"].base == pytest.approx(0.534469, abs=5e-7)
    assert found.settled["1"].difference < 0


def test_periodic_chains_settle_on_average_and_closed_ends_grow():
    states = States(["a", "b"])
    found = what_if(Chain(states, [[0, 1], [1, 0]]), Change("a", "a", add=0.5), periods=3, start={"a": 10})
    assert found.settled["a"].base == pytest.approx(5)  # goes round for ever: 5 and 5 on average
    assert found.settled["a"].changed == pytest.approx(10 * 2 / 3)  # pi of (.5 .5; 1 0)
    found = what_if(
        Chain(states, [[0, 1], [1, 0]]),
        Change("a", "a", add=0.5),
        periods=3,
        start={"a": 1},
        joiners={"a": 1},
    )
    assert np.isnan(found.settled["a"].base) and "settled:grows_without_limit" in found.reasons


def test_settled_draws_scatter_around_the_estimate():
    draws = draws_of_chain(300, at_risk=2000)
    found = what_if(CHAIN, KEEP, periods=2, start=START, joiners=JOINERS, draws=draws, value=MONEY)
    for name in ("all_live", "left", "value", "net"):
        pair = found.settled[name]
        assert pair.low < pair.difference < pair.high


# ---- rows without data, segments, refusals ----
def test_what_passes_through_a_row_without_data_is_missing():
    barred = [("paused", "fresh"), ("paused", "lapsed"), ("paused", "left")]
    states = States(STATES.names, exits=STATES.exits, entries=["fresh"], away=["paused"], impossible=barred)
    rows = P.copy()
    rows[2] = np.nan
    found = what_if(Chain(states, rows), KEEP, periods=3, start=START, value=MONEY)
    assert found.by_period["fresh"].base == pytest.approx([0, 0, 0])
    assert np.isnan(found.by_period["steady"].base[-1]) and np.isnan(found.total["net"].difference)
    assert "rows_without_data:paused" in found.reasons and "break_even_cost" not in found.total


def test_a_change_that_opens_a_way_to_a_row_without_data():
    states = States(["a", "b", "out"], exits=["out"])
    chain = Chain(states, [[0.9, 0, 0.1], [np.nan] * 3, [0, 0, 1]])
    found = what_if(chain, Change("a", "b", add=0.1), periods=2, start={"a": 10})
    assert found.by_period["a"].base == pytest.approx([9, 8.1])
    assert np.isnan(found.by_period["a"].changed).tolist() == [False, True]


def test_a_segments_own_fit_and_unknown_segments():
    from types import SimpleNamespace

    web = SimpleNamespace(schedule=CHAIN.schedule)
    model = SimpleNamespace(schedule=CHAIN.schedule, segments={"web": web})
    plan = Scenario("web only", KEEP, segment="web")
    found = what_if(model, plan, periods=2, start=START)
    assert found.segment == "web" and found.by_period["steady"].difference[0] == pytest.approx(
        200 * 0.04 * 8 / 9
    )
    with pytest.raises(
        CallError, match='is for the segment "shop", and this model knows no such part .*"web", "all"'
    ):
        what_if(model, Scenario("shop", KEEP, segment="shop"), periods=2, start=START)


def test_money_questions_need_money():
    for plan in (Scenario("dear", per_period={"steady": 2}), Scenario("call", KEEP, fixed_cost=1.0)):
        with pytest.raises(CallError, match="is about money; say how money is counted: value="):
            what_if(CHAIN, plan, periods=2, start=START)


def test_a_change_that_cannot_be_met_is_refused():
    with pytest.raises(CallError, match="cannot be met"):
        what_if(CHAIN, Change("steady", "left", add=0.95), periods=2, start=START)


def test_common_shocks_count_from_the_base():
    matrices = dirichlet_draws(P, 300, 6)
    shocked = np.stack([matrices, matrices[::-1], matrices], axis=1)  # (D, 3 periods ahead, K, K)
    draws = Draws.of_matrices(seasonal([P]), [shocked], part="rates and common shocks")
    found = what_if(
        seasonal([P]), KEEP, periods=3, start=START, draws=draws, base_period="2026-09", level=0.5
    )
    last = []
    for d in range(6):
        per = [shocked[d, h] for h in range(3)]
        new = [m.copy() for m in per]
        for m in new:
            m[1] = shift(m[1], 3, -min(0.04, m[1, 3]))
        ends = [loop(ms, OPEN, [np.zeros(5)] * 3, [amounts()] * 3, np.ones(3))[0][-1] for ms in (per, new)]
        last.append((ends[1] - ends[0])[STATES.live_mask].sum())
    assert found.by_period["all_live"].low[-1] == pytest.approx(np.quantile(last, 0.25))


def test_observed_amounts_scatter_the_gain():
    from cohortflow.projector.amounts import Amounts

    amounts_seen = Amounts(STATES, [4.0, 20.0, 0, 0, 0], np.diag([0, 4.0, 0, 0, 0]), [10, 10, 10, 1, 1])
    money = {"per_period": amounts_seen, "timing": "start"}
    draws = Draws.of_matrices(CHAIN.schedule, [np.tile(P, (4000, 1, 1, 1))])
    found = what_if(CHAIN, KEEP, periods=2, start={"steady": 100}, value=money, draws=draws, joiners=None)
    # after one period 100 x .04 x 8/9 more are steady, who pay 20 with sd 2
    pair = found.total["value"]
    gain = 100 * 0.04 * 8 / 9
    assert pair.difference == pytest.approx(20 * gain)
    assert (pair.high - pair.low) / 2 == pytest.approx(1.645 * 2 * gain, rel=0.08)
    # a price that is given has no error: what scatters is what they pay now
    dear = what_if(
        CHAIN,
        Scenario("dear", per_period={"steady": 25.0}),
        periods=1,
        start={"steady": 100},
        value=money,
        draws=draws,
    )
    assert (dear.total["value"].high - dear.total["value"].low) / 2 == pytest.approx(
        1.645 * 2 * 100, rel=0.08
    )
