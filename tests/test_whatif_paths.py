"""Paths of all draws at once against each draw by itself."""

import numpy as np
import pytest

from cohortflow.chain import Draws
from cohortflow.projector.mix import step_counts
from cohortflow.projector.money import money_terms
from cohortflow.projector.unroll import drawn_schedule
from cohortflow.whatif.change import Change, changed
from cohortflow.whatif.course import Course
from cohortflow.whatif.paths import expected_pay, pay_of, steps_of, through, walk_gains, walk_paths
from tests.projector_cases import CHAIN, SEPTEMBER, STATES, P, dirichlet_draws, two_types
from tests.whatif_cases import JOINERS, MONEY, START, amounts, models

OPEN, JOIN = np.array([40.0, 200, 30, 0, 0]), np.array([25.0, 5, 0, 0, 0])


def nothing(step):
    return None


@pytest.mark.parametrize("case", models(), ids=lambda c: c[0])
def test_draws_of_every_kind_of_model_equal_their_own_projections(case):
    _, schedule, live, gone, start, joiners = case
    states, rng = schedule.states, np.random.default_rng(4)
    stacks = [
        np.stack([[_jiggled(m, rng) for m in c.matrices] for _ in range(5)]) for c in schedule.components
    ]
    draws = Draws.of_matrices(schedule, stacks)
    change = Change(live, gone, multiply=0.5)
    counts = np.array([start.get(n, 0.0) for n in states.names])
    coming = np.array([joiners.get(n, 0.0) for n in states.names])
    course = Course.of(schedule, [change], SEPTEMBER, 0)
    found = walk_paths(course, counts, np.tile(coming, (6, 1))[..., None], nothing, draws=draws)
    for d in range(5):
        one = changed(drawn_schedule(draws, d), change)
        assert found.counts[..., d] == pytest.approx(step_counts(one, counts, 6, coming), rel=1e-10)
    assert found.short == 0 and found.treated.shape == (6, 5)


def _jiggled(matrix, rng):
    out = matrix * rng.uniform(0.8, 1.2, matrix.shape)
    return out / out.sum(axis=1, keepdims=True)


def test_drawn_start_and_join_laws_are_used():
    schedule, _ = two_types()
    share = np.array([0.1, 0.9])
    laws = [np.array([np.diag([s, s]) for s in side]) for side in (share, 1 - share)]
    stacks = tuple(np.tile(c.matrices, (2, 1, 1, 1)) for c in schedule.components)
    draws = Draws(schedule, stacks, tuple(laws), tuple(laws))
    inflow = np.array([[10.0, 0]])[..., None]
    found = walk_paths(Course.of(schedule, [], None, 0), np.array([100.0, 0]), inflow, nothing, draws=draws)
    # sticky keep .98, fragile .8; draw 0: 10 sticky, 90 fragile
    assert found.counts[1, 0] == pytest.approx([10 * 0.98 + 90 * 0.8 + 10, 90 * 0.98 + 10 * 0.8 + 10])


def test_treated_customers_are_counted_once():
    both = [Change("steady", "left", add=-0.01), Change("all_live", "lapsed", add=0.01)]
    course = Course.of(CHAIN.schedule, both, None, 0)
    found = walk_paths(course, OPEN, np.zeros((1, 5, 1)), nothing)
    assert found.treated == pytest.approx(np.array([[240]]))  # 40 fresh and 200 steady; paused is away


def test_expected_pay_with_estimated_amounts():
    from dataclasses import replace

    terms = money_terms(STATES, MONEY["per_period"], on_move=MONEY["on_move"], timing="middle")
    report = np.arange(5)
    assert expected_pay(P[..., None], report, None) is None
    assert expected_pay(P[..., None], report, terms)[:, 0] == pytest.approx((P * amounts()).sum(axis=1))
    unsure = replace(terms, error=np.diag([0, 4.0, 0, 0, 0]), once=STATES.exit_mask)
    off = np.array([[9.0, 1.0, 9.0, 9.0, 9.0]])  # only steady is an estimate
    dear = amounts()
    dear[1] += 0.5
    dear[:, 1] += 0.5
    assert expected_pay(P[..., None], report, unsure, off.T)[:, 0] == pytest.approx((P * dear).sum(axis=1))


def test_through_takes_one_or_many():
    rng = np.random.default_rng(1)
    x, many = rng.random((4, 3)), rng.random((4, 2, 3))
    each = np.array([x[:, d] @ many[..., d] for d in range(3)]).T
    assert through(x, many) == pytest.approx(each)
    assert through(x[:, :1], many) == pytest.approx(np.array([x[:, 0] @ many[..., d] for d in range(3)]).T)
    assert through(x, many[..., :1]) == pytest.approx((x.T @ many[..., 0]).T)
    assert pay_of(x, many[:, 0]) == pytest.approx((x * many[:, 0]).sum(axis=0))
    assert pay_of(x, many[:, 0, :1]) == pytest.approx(x.T @ many[:, 0, 0])


def test_gains_are_the_difference_of_two_paths():
    draws = Draws.of_matrices(CHAIN.schedule, [dirichlet_draws(P, 300, 7)[:, None]])
    terms = money_terms(STATES, MONEY["per_period"], on_move=MONEY["on_move"])
    courses = [
        Course.of(CHAIN.schedule, c, None, 0)
        for c in ([], [Change("steady", "left", multiply=0.5, starts=2)])
    ]
    inflows = [np.tile(JOIN * k, (4, 1))[..., None] for k in (1, 2)]
    paths = [
        walk_paths(c, OPEN, flow, lambda step: terms, draws=draws)
        for c, flow in zip(courses, inflows, strict=True)
    ]
    steps = [steps_of(c, lambda step: terms, draws) for c in courses]
    found = walk_gains(*steps, OPEN, tuple(inflows), draws.size)
    assert found.counts == pytest.approx(paths[1].counts[1:] - paths[0].counts[1:])
    assert found.paid == pytest.approx(paths[1].paid - paths[0].paid)
    assert found.treated == pytest.approx(paths[1].treated) and not found.treated[0].any()


def test_the_season_of_drawn_matrices_comes_round():
    from tests.projector_cases import seasonal

    drawn = np.stack([dirichlet_draws(P, 300, 3), dirichlet_draws(P, 300, 3, seed=2)], axis=1)
    schedule = seasonal([P, P])
    draws = Draws.of_matrices(schedule, [drawn])
    course = Course.of(schedule, [], SEPTEMBER + 1, 1)
    found = walk_paths(course, OPEN, np.tile(JOIN, (3, 1))[..., None], nothing, draws=draws)
    x = OPEN
    for place in (1, 0, 1):
        x = x @ drawn[2, place] + JOIN
    assert found.counts[-1, :, 2] == pytest.approx(x)
    assert JOINERS["fresh"] == 25 and START["steady"] == 200
