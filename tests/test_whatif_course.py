"""Dated changes as sequences of matrices: held, seasonal, drawn."""

import numpy as np
import pytest

from cohortflow.chain import Draws
from cohortflow.whatif.change import Change, changed
from cohortflow.whatif.course import Course
from tests.projector_cases import CHAIN, SEPTEMBER, P, seasonal
from tests.whatif_cases import OTHER, shift

HALF = Change("steady", "left", add=-0.05, starts="2026-11", ends="2026-12")
LATER = Change("steady", "left", add=-0.02, starts="2027-02")


def under(matrix, d):
    out = matrix.copy()
    out[1] = shift(matrix[1], 3, d)
    return out


def test_a_season_stays_a_season_under_dated_changes():
    # first matrix of the model leads out of September; the base is October: step 0 has the second
    course = Course.of(seasonal([P, OTHER]), [HALF, LATER], SEPTEMBER + 1, 1)
    expected = [under(OTHER, -0.05), under(P, -0.05), OTHER, under(P, -0.02), under(OTHER, -0.02)]
    for h, matrix in enumerate(expected):
        assert course.matrix(0, h) == pytest.approx(matrix), h
    assert course.in_force(0) == (0,) and course.settled_after == 3 and course.for_ever == (1,)
    assert np.allclose(course.explicit(5).components[0].matrices, expected)
    later = course.later()
    assert later.components[0].tail == "cycle" and later.first == SEPTEMBER
    assert later.components[0].matrices == pytest.approx(np.stack([under(P, -0.02), under(OTHER, -0.02)]))


def test_undated_changes_are_there_from_the_first_step_for_ever():
    keep = Change("steady", "left", add=-0.05)
    course = Course.of(CHAIN.schedule, [keep], None, 0)
    assert course.settled_after == 0 and course.for_ever == (0,)
    assert course.matrix(0, 99) == pytest.approx(changed(CHAIN.schedule, keep).chain.matrix)


def test_drawn_matrices_are_changed_each_by_itself():
    drawn = np.stack([P, OTHER])[:, None]
    course = Course.of(CHAIN.schedule, [Change("steady", "left", add=-0.12)], None, 0)
    found, short = course.drawn(Draws.of_matrices(CHAIN.schedule, [drawn]), 0, 0)
    assert found[0] == pytest.approx(under(P, -0.1)) and found[1] == pytest.approx(under(OTHER, -0.12))
    assert short == 0.5
