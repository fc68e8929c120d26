"""Who stands where at the end of the counts, and how contexts become expanded states."""

import numpy as np
import pytest

from cohortflow.errors import NotIdentified
from cohortflow.estimator import fit
from cohortflow.estimator.contexts import present
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["fresh", "steady", "quiet", "left"], exits=["left"], entries=["fresh"])
# five customers, periods 0..4. -1: no row.
PANEL = np.array([
    [0, 1, 1, 2, 2],    # history from the left edge: tenure not known
    [-1, 0, 1, 1, 1],   # joined in 1: tenure 3, third month steady (spell 2), previous steady
    [-1, -1, -1, -1, 0],  # joins in the last period
    [-1, -1, 0, 1, 3],  # leaves in the last period: not present
    [-1, 0, 1, -1, 1],  # a gap: what it is in the last period has no known context
])  # fmt: skip


def test_present_by_hand():
    now = present(panel_tally(PANEL, STATES)).sort_values(["state", "tenure"]).to_numpy().tolist()
    # tenure, spell, previous, state, n
    assert now == [[0, 0, -1, 0, 1], [-1, -1, -1, 1, 1], [3, 2, 1, 1, 1], [-1, 1, 2, 2, 1]]


def test_start_law_of_a_tenure_model_is_todays_composition():
    f = fit(panel_tally(PANEL, STATES), model="tenure", bands=[2, 4])
    part = f.schedule.components[0]
    # steady now: one with tenure 3, one of unknown history: half and half
    steady = {i: part.start[1, i] for i in np.flatnonzero(part.start[1])}
    assert sorted(steady.values()) == [0.5, 0.5] and set(part.report[list(steady)]) == {1}
    assert np.allclose(part.start.sum(axis=1), 1) and np.allclose(part.join.sum(axis=1), 1)
    assert part.start[3, part.report == 3].tolist() == [1.0]  # one expanded state for an exit
    # an unseen state starts where its past moves stood, or as a joiner does
    assert np.allclose(part.matrices.sum(axis=2), 1)


def test_bare_counts_cannot_tell():
    with pytest.raises(NotIdentified, match='do not hold the table "contexts"'):
        fit(panel_tally(PANEL, STATES, full=False), model="tenure")
