"""Slopes of every target: complex steps of independent formulas, the markov room, published sensitivities."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Component, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.markov import (
    exit_time_derivative,
    mix_derivative,
    remaining_mix_derivative,
    retention_derivative,
    settled_base_derivative,
)
from cohortflow.states import States
from cohortflow.whatif.slopes import slopes
from cohortflow.whatif.target import resolve
from tests.projector_cases import CHAIN, SEPTEMBER, P, banded, seasonal, two_types
from tests.whatif_cases import JOINERS, MONEY, OTHER, START, amounts

STEP = 1e-30
OPEN, JOIN = np.array([40.0, 200, 30, 0, 0]), np.array([25.0, 5, 0, 0, 0])


def slope_of(name, model=CHAIN, **more):
    target = resolve(model, name, start=START, joiners=JOINERS, value=MONEY, **more)
    return slopes(target, model if isinstance(model, Schedule) else model.schedule)


def complex_steps(figure, stack):
    """Derivative of figure(stack) with respect to every entry of (L, K, K) matrices."""
    out = np.zeros(stack.shape)
    for where in np.ndindex(stack.shape):
        moved = stack.astype(complex)
        moved[where] += 1j * STEP
        out[where] = figure(moved).imag / STEP
    return out


def walked(stack, horizon, weight):
    x = OPEN.astype(complex)
    for h in range(horizon):
        x = x @ stack[h % len(stack)] + JOIN
    return x @ weight


def test_base_at_the_horizon_of_a_season():
    found = slope_of("base:steady", seasonal([P, OTHER]), horizon=5, base_period=SEPTEMBER)
    exact = complex_steps(lambda s: walked(s, 5, np.eye(5)[1]), np.stack([P, OTHER]))
    assert found.value == pytest.approx(walked(np.stack([P, OTHER]), 5, np.eye(5)[1]).real)
    assert found.gradients[0] == pytest.approx(exact, rel=1e-12)
    plain = slope_of("base", horizon=3)
    closed = mix_derivative(P, OPEN, steps=3, weights=np.array([1.0, 1, 0, 0, 0])[:, None])
    assert plain.gradients[0][0].shape == closed.gradient(0).shape


def test_settled_base_is_the_markov_rooms():
    found = slope_of("settled_base")
    exact = settled_base_derivative(P, [3, 4], JOIN)
    weight = np.array([1.0, 1, 0])
    assert found.value == pytest.approx(weight @ exact.value)
    inside = exact.along(weight)
    assert found.gradients[0][0][:3, :3] == pytest.approx(inside[:3, :3], rel=1e-12)


def test_settled_base_of_a_season():
    stack = np.stack([P, OTHER, P])

    def average(s):
        # x0 = x0 A + c over three places, then the average of live customers
        inner = s[:, :3, :3]
        c = JOIN[:3] @ inner[1] @ inner[2] + JOIN[:3] @ inner[2] + JOIN[:3]
        x = np.linalg.solve((np.eye(3) - inner[0] @ inner[1] @ inner[2]).T, c)
        total = x[:2].sum()
        for k in (0, 1):
            x = x @ inner[k] + JOIN[:3]
            total = total + x[:2].sum()
        return total / 3

    found = slope_of("settled_base", seasonal([P, OTHER, P]), base_period=SEPTEMBER)
    assert found.value == pytest.approx(average(stack))
    assert found.gradients[0][:, :3, :3] == pytest.approx(complex_steps(average, stack)[:, :3, :3], rel=1e-10)


def test_life_is_the_markov_rooms_and_the_whales():
    found = slope_of("life:steady")
    exact = exit_time_derivative(P, [3, 4])
    assert found.value == pytest.approx(exact.value[1])
    assert found.gradients[0][0] == pytest.approx(exact.gradient(1), rel=1e-12)
    # Killer whale: Brault & Caswell (1993) Ecology 74; mean times by popbio 2.8 in R (VERIFIED); elasticities of
    # yearling life expectancy sum to 58.2751436 (recomputed for the check values)
    up = np.array([[0, 0.9775, 0, 0], [0, 0.9111, 0.0736, 0], [0, 0, 0.9534, 0.0452], [0, 0, 0, 0.9804]])
    whole = np.vstack([np.column_stack([up, 1 - up.sum(axis=1)]), [0, 0, 0, 0, 1]])
    names = ["yearling", "juvenile", "mature", "post", "dead"]
    whale = Chain(States(names, exits=["dead"]), whole, period="year")
    for name, printed in zip(names, (69.410562, 69.985230, 70.946834, 51.020408), strict=False):
        assert slopes(resolve(whale, f"life:{name}"), whale.schedule).value == pytest.approx(
            printed, abs=5e-7
        )
    yearling = slopes(resolve(whale, "life:yearling"), whale.schedule)
    elastic = (yearling.gradients[0][0][:4, :4] * up).sum() / yearling.value
    assert elastic == pytest.approx(58.2751436, abs=5e-8)


def discounted(stack, horizon, reward, start, inflow=0.0):
    """sum of discounted contributions, walked forward."""
    b, x, total = 1.1 ** (-1 / 12), start.astype(complex), 0.0
    for h in range(horizon):
        matrix = stack[h % len(stack)]
        total = total + b ** (h + 0.5) * (x[:, None] * matrix * reward).sum()
        x = x @ matrix + inflow
    return total


@pytest.mark.parametrize(
    "of, start, inflow", [("base", OPEN, 0.0), ("joiners", JOIN, 0.0), ("total", OPEN, JOIN)]
)
def test_value_over_a_horizon(of, start, inflow):
    stack = np.stack([P, OTHER])
    found = slope_of(f"value:{of}", seasonal([P, OTHER]), horizon=6, base_period=SEPTEMBER)
    assert found.value == pytest.approx(discounted(stack, 6, amounts(), start, inflow).real)
    exact = complex_steps(lambda s: discounted(s, 6, amounts(), start, inflow), stack)
    assert found.gradients[0] == pytest.approx(exact, rel=1e-12)


def test_value_for_ever():
    def ahead(s):
        b = 1.1 ** (-1 / 12)
        return (
            b**0.5
            * OPEN[:3]
            @ np.linalg.solve(np.eye(3) - b * s[0, :3, :3], (s[0] * amounts()).sum(axis=1)[:3])
        )

    found = slope_of("value")
    assert found.value == pytest.approx(ahead(P[None]).real)
    assert found.gradients[0][:, :3] == pytest.approx(complex_steps(ahead, P[None])[:, :3], rel=1e-10)
    season = slope_of("value", seasonal([P, OTHER]), base_period=SEPTEMBER)
    far = complex_steps(lambda s: discounted(s, 600, amounts(), OPEN), np.stack([P, OTHER]))
    assert season.gradients[0][:, :3, :3] == pytest.approx(far[:, :3, :3], rel=1e-4)


def test_two_state_reward_with_move_costs():
    # Bard (2000) in the R markovchain vignette 6.2 (VERIFIED): income 100 in state 1, costs -20 -30 / -40 0; the
    # printed 48.96009 at step 5 from state 1 is the period after five, alone
    chain = Chain(States(["one", "two"]), [[0.9, 0.1], [0.05, 0.95]], period="year")
    money = {"per_period": {"one": 100.0}, "timing": "start",
             "on_move": [("one", "one", -20), ("one", "two", -30), ("two", "one", -40)]}  # fmt: skip
    target = resolve(chain, "value:one", horizon=5, value=money)
    found = slopes(target, chain.schedule)
    y = np.array([[80.0, 70.0], [-40.0, 0.0]])

    def summed(s):
        x, total = np.array([1.0, 0], dtype=complex), 0.0
        for _ in range(5):
            total = total + (x[:, None] * s[0] * y).sum()
            x = x @ s[0]
        return total

    assert found.value == pytest.approx(summed(chain.matrix[None]).real)
    assert found.gradients[0] == pytest.approx(complex_steps(summed, chain.matrix[None]))
    six = slopes(resolve(chain, "value:one", horizon=6, value=money), chain.schedule)
    assert six.value - found.value == pytest.approx(48.96009, abs=5e-6)


def test_value_without_an_end_is_refused():
    chain = Chain(States(["a", "b"]), [[0.9, 0.1], [0.5, 0.5]])
    target = resolve(chain, "value:a", value={"per_period": {"a": 1.0}})
    with pytest.raises(NotIdentified, match="Without a discount and with customers who never leave"):
        slopes(target, chain.schedule)


def test_those_who_remain():
    found = slope_of("remaining_mix:steady")
    exact = remaining_mix_derivative(P[:3, :3])
    assert found.value == pytest.approx(exact.value[1])
    assert found.gradients[0][0][:3, :3] == pytest.approx(exact.gradient(1))
    kept = slope_of("remaining_retention")
    assert kept.value == pytest.approx(retention_derivative(P[:3, :3]).value[0])
    assert kept.gradients[0][0][:3, :3] == pytest.approx(retention_derivative(P[:3, :3]).gradient(0))


def test_those_who_remain_over_a_season():
    stack = np.stack([P, OTHER])
    found = slope_of("remaining_mix:steady", seasonal([P, OTHER]), base_period=SEPTEMBER)

    def share(s):
        x = np.array([0.2, 0.6, 0.2])
        for _ in range(400):
            x = x @ s[0, :3, :3] @ s[1, :3, :3]
            x = x / x.sum()
        return x[1]

    kept = slope_of("remaining_retention", seasonal([P, OTHER]), base_period=SEPTEMBER)
    step = 1e-6
    for where in ((0, 1, 1), (1, 1, 2), (0, 2, 1)):
        up, down = stack.copy(), stack.copy()
        up[where] += step
        down[where] -= step
        assert found.gradients[0][where] == pytest.approx((share(up) - share(down)) / (2 * step), rel=1e-6)
        top = [np.abs(np.linalg.eigvals(s[0, :3, :3] @ s[1, :3, :3])).max() ** 0.5 for s in (up, down)]
        assert kept.gradients[0][where] == pytest.approx((top[0] - top[1]) / (2 * step), rel=1e-6)


def test_the_kind_that_stays_longest_is_who_remains_and_a_tie_is_refused():
    schedule, _ = two_types()
    found = slopes(resolve(schedule, "remaining_retention"), schedule)
    assert found.value == pytest.approx(0.98) and not found.gradients[1].any()
    even, _ = two_types(sticky=0.1, fragile=0.1)
    with pytest.raises(NotIdentified, match="Two kinds of customers remain for equally long"):
        slopes(resolve(even, "remaining_retention"), even)


def test_a_row_without_data_leaves_no_mix_of_those_remaining():
    rows = P.copy()
    rows[2] = np.nan
    chain = Chain(CHAIN.states, rows)
    with pytest.raises(NotIdentified, match="needs the row of every state, and there are no data for paused"):
        slopes(resolve(chain, "remaining_retention"), chain.schedule)


def test_kinds_and_bands_add_up():
    bands, _ = banded()
    target = resolve(bands, "settled_base", joiners={"live": 10.0})
    # new .7 old .9: joiners are new once, then old for 1 / .1 periods: 10 + 70
    assert slopes(target, bands).value == pytest.approx(80)
    schedule, _ = two_types()
    life = slopes(resolve(schedule, "life:here"), schedule)
    assert life.value == pytest.approx(0.5 / 0.02 + 0.5 / 0.2)
    assert life.gradients[0][0, 0, 0] == pytest.approx(0.5 / 0.02**2)


def test_estimated_amounts_of_an_exit_count_once():
    from dataclasses import replace

    from cohortflow.whatif.money import as_money

    here = Chain(States(["here", "gone"], exits=["gone"]), [[0.9, 0.1], [0, 1]])
    terms = as_money({"per_period": {"here": 10.0, "gone": 4.0}, "timing": "end"}, here.schedule).terms
    once = replace(terms, once=np.array([False, True]))
    found = slopes(resolve(here, "value:here", value=once), here.schedule)
    assert found.value == pytest.approx(0.9 * 10 / 0.1 + 4)  # nine more payments of 10, 4 on leaving
    part = Component([[[0.9, 0.1], [0, 1]]], [0, 1], np.eye(2), np.eye(2))
    twice = Schedule(here.states, (replace(part, start=np.eye(2) / 2, join=np.eye(2) / 2),) * 2)
    assert slopes(resolve(twice, "value:here", value=once), twice).value == pytest.approx(found.value)
