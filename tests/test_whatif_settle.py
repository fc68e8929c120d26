"""Where it settles: against the markov room, long loops and the reasons why it does not."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.markov import settled_base_derivative, time_average_matrix
from cohortflow.projector.money import money_terms
from cohortflow.states import States
from cohortflow.whatif.change import Change
from cohortflow.whatif.course import Course
from cohortflow.whatif.paths import steps_of
from cohortflow.whatif.settle import settle as settle_steps
from tests.projector_cases import CHAIN, STATES, P, dirichlet_draws, seasonal
from tests.whatif_cases import MONEY, OTHER, amounts

OPEN, JOIN = np.array([40.0, 200, 30, 0, 0]), np.array([[25.0, 5, 0, 0, 0]])


def nothing(step):
    return None


def settle(course, start, inflow, prices, *, draws=None):
    found = settle_steps(steps_of(course, prices, draws), start, inflow[0], draws.size if draws else 1)
    assert found.counts.shape[1] == (draws.size if draws else 1)
    return type(found)(found.counts.T, found.paid, found.treated, found.reason)


def test_settled_base_is_that_of_the_markov_room():
    # settled_base_derivative: r N by elimination without subtraction, another route than the solve here
    expected = settled_base_derivative(P, [3, 4], JOIN[0]).value
    found = settle(Course.of(CHAIN.schedule, [], None, 0), OPEN, JOIN, nothing)
    assert found.counts[0, :3] == pytest.approx(expected, rel=1e-12)
    assert found.counts[0, 3:].sum() == pytest.approx(30)  # as many leave as join
    assert found.counts[0, 3] == pytest.approx(expected @ P[:3, 3])


def test_money_and_treated_a_period():
    terms = money_terms(STATES, MONEY["per_period"], on_move=MONEY["on_move"])
    course = Course.of(CHAIN.schedule, [Change("steady", "left", add=0.0)], None, 0)
    found = settle(course, OPEN, JOIN, lambda step: terms)
    assert found.paid[0] == pytest.approx((found.counts[0, :, None] * P * amounts())[:3].sum())
    assert found.treated[0] == pytest.approx(found.counts[0, 1])


def test_each_draw_settles_by_itself():
    drawn = dirichlet_draws(P, 500, 4)
    draws = Draws.of_matrices(CHAIN.schedule, [drawn[:, None]])
    found = settle(Course.of(CHAIN.schedule, [], None, 0), OPEN, JOIN, nothing, draws=draws)
    for d in range(4):
        assert found.counts[d, :3] == pytest.approx(settled_base_derivative(drawn[d], [3, 4], JOIN[0]).value)


def test_a_season_is_averaged_over_its_places():
    course = Course.of(seasonal([P, OTHER, P]), [], None, 1)
    found = settle(course, OPEN, JOIN, nothing).counts[0]
    x, seen = OPEN.copy(), []
    for h in range(3000):
        x = x @ (P, OTHER, P)[(h + 1) % 3] + JOIN[0]
        lost, x[3:] = x[3:].copy(), 0.0
        seen.append(np.append(x[:3], lost))
    assert found == pytest.approx(np.mean(seen[-3:], axis=0), rel=1e-9)


def test_without_joiners_a_closed_chain_keeps_its_time_average():
    states = States(["a", "b", "c"])
    swing = np.array([[0, 1.0, 0], [1.0, 0, 0], [0.2, 0.3, 0.5]])
    found = settle(
        Course.of(Chain(states, swing).schedule, [], None, 0),
        np.array([6.0, 0, 4]),
        np.zeros((1, 3)),
        nothing,
    )
    assert found.counts[0] == pytest.approx(np.array([6.0, 0, 4]) @ time_average_matrix(swing), abs=1e-9)


def test_why_it_does_not_settle():
    stuck = Chain(States(["a", "b", "out"], exits=["out"]), [[0.5, 0.4, 0.1], [0, 1.0, 0], [0, 0, 1]])
    course = Course.of(stuck.schedule, [], None, 0)
    found = settle(course, np.zeros(3), np.array([[1.0, 0, 0]]), nothing)
    assert found.reason == "grows_without_limit" and np.isnan(found.counts).all()
    rows = P.copy()
    rows[2] = np.nan
    course = Course.of(Chain(STATES, rows).schedule, [], None, 0)
    assert settle(course, OPEN, JOIN, nothing).reason == "rows_without_data"


def test_a_draw_without_a_way_out_is_missing():
    drawn = np.stack([P, P])[:, None].copy()
    drawn[1, 0, :3] = [[0, 1, 0, 0, 0], [0, 0.9, 0.1, 0, 0], [0, 1, 0, 0, 0]]
    draws = Draws.of_matrices(CHAIN.schedule, [drawn])
    found = settle(Course.of(CHAIN.schedule, [], None, 0), OPEN, JOIN, nothing, draws=draws)
    assert np.isnan(found.counts[1, 1]) or found.counts[1, 1] > 1e12
    assert found.counts[0, 1] == pytest.approx(settled_base_derivative(P, [3, 4], JOIN[0]).value[1])
