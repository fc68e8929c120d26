"""Repairs of a logarithm: by hand, by what each promises, and the projection by a general optimiser."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize

from cohortflow.errors import CallError
from cohortflow.markov import check_generator, repair

WAYS = ["diagonal", "weighted", "quasi_optimal"]
ROW = [-0.3, 0.4, -0.1]  # state 0 of three, one rate negative


def first_row(by: str) -> list[float]:
    return repair([ROW, [0.2, -0.2, 0.0], [0.0, 0.0, 0.0]], by=by).generator[0].tolist()


def test_each_way_by_hand():
    assert first_row("diagonal") == pytest.approx([-0.4, 0.4, 0.0])
    # weighted: 0.1 owed, spread as 0.3 : 0.4 -> -0.3 - 0.3/7, 0.4 - 0.4/7
    assert first_row("weighted") == pytest.approx([-0.3 - 0.3 / 7, 0.4 - 0.4 / 7, 0.0])
    # quasi-optimal: mean of all three is 0, -0.1 is dropped, then 0.05 off the other two
    assert first_row("quasi_optimal") == pytest.approx([-0.35, 0.35, 0.0])


def test_distances_are_stated():
    found = repair([ROW, [0.2, -0.2, 0.0], [0.0, 0.0, 0.0]], by="diagonal")
    assert found.row_distance.tolist() == pytest.approx([np.sqrt(0.02), 0.0, 0.0])
    assert found.distance == pytest.approx(np.sqrt(0.02)) and found.by == "diagonal"


@st.composite
def logarithms(draw):
    size = draw(st.integers(2, 5))
    entries = st.lists(st.floats(-1, 1), min_size=size, max_size=size)
    log = np.array(draw(st.lists(entries, min_size=size, max_size=size)))
    np.fill_diagonal(log, 0.0)
    return log - np.diag(log.sum(axis=1))


@given(logarithms())
@settings(deadline=None)
def test_every_way_ends_in_a_generator_and_the_projection_is_closest(log):
    found = {by: repair(log, by=by) for by in WAYS}
    for by in WAYS:
        check_generator(found[by].generator)
    best = found["quasi_optimal"].row_distance
    assert (best <= found["diagonal"].row_distance + 1e-12).all()
    assert (best <= found["weighted"].row_distance + 1e-12).all()


@given(logarithms())
@settings(deadline=None, max_examples=20)
def test_the_projection_is_that_of_a_general_optimiser(log):
    size, row = len(log), log[0]
    bounds = [(None, None)] + [(0, None)] * (size - 1)
    plain = minimize(
        lambda g: ((g - row) ** 2).sum(),
        np.zeros(size),
        jac=lambda g: 2 * (g - row),
        bounds=bounds,
        constraints={"type": "eq", "fun": lambda g: g.sum(), "jac": lambda g: np.ones(size)},
        method="SLSQP",
        options={"ftol": 1e-14, "maxiter": 500},
    )
    assert repair(log).generator[0] == pytest.approx(plain.x, abs=1e-5)


@pytest.mark.parametrize("by", WAYS)
@given(log=logarithms())
@settings(deadline=None)
def test_rows_of_a_generator_come_back_unchanged(by, log):
    G = np.abs(log)
    np.fill_diagonal(G, 0.0)
    G -= np.diag(G.sum(axis=1))
    found = repair(G, by=by)
    assert (found.generator == G).all() and found.distance == 0.0


def test_nothing_is_invented():
    with pytest.raises(CallError, match="row 1 of logarithm holds nan: nothing was observed there"):
        repair([[-0.1, 0.1], [np.nan, np.nan]])
    with pytest.raises(
        CallError, match="row 0 of the logarithm sums to 0.1, not to 0: it is no logarithm of a"
    ):
        repair([[-0.1, 0.2], [0.0, 0.0]])
    with pytest.raises(
        CallError, match=r"by is 'wieghted'; it must be one of .*\(did you mean \"weighted\"\?\)"
    ):
        repair([[-0.1, 0.1], [0.0, 0.0]], by="wieghted")
