"""Memory of two periods."""

import numpy as np
import pytest

from cohortflow.estimator import fit
from cohortflow.projector import project
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["a", "b", "x"], exits=["x"], entries=["a"])
# leaving b for the exit: .4 after a, .1 after b. From a: stay .5, to b .5
AFTER = {(-1, 0): [0.5, 0.5, 0], (0, 0): [0.5, 0.5, 0], (1, 0): [0.5, 0.5, 0],
         (0, 1): [0.3, 0.3, 0.4], (1, 1): [0.4, 0.5, 0.1], (-1, 1): [0.3, 0.3, 0.4]}  # fmt: skip


def panel(customers=4000, periods=20, seed=1):
    rng = np.random.default_rng(seed)
    out = np.full((customers, periods), -1)
    for c in range(customers):
        before, now = -1, 0
        for t in range(int(rng.integers(0, periods - 2)), periods):
            out[c, t] = now
            if now == 2:
                break
            before, now = now, int(rng.choice(3, p=AFTER[before, now]))
    return out


def test_rates_depend_on_the_state_before_and_the_projection_follows():
    counts = panel_tally(panel(), STATES)
    f = fit(counts, model="second_order")
    part = f.schedule.components[0]
    assert set(part.report) == {0, 1, 2} and np.allclose(part.matrices.sum(axis=2), 1)
    # two steps by hand from a joiner in a: a (.5) then b: a-b .5 x .5 + ...; exits within 3 periods:
    # P(x by 2) = .5 x .4 = .2; by 3: + path a a b x: .25 x .4 = .1, a b b x: .5 x .3 x .1 = .015
    ahead = project(f, start={"a": 0}, periods=3, joiners=None)
    assert ahead.mean[3, 0] == 0
    law = part.join[0]
    for step, gone in ((2, 0.2), (3, 0.2 + 0.1 + 0.015)):
        at = law @ np.linalg.matrix_power(part.matrices[0], step)
        assert at[part.report == 2].sum() == pytest.approx(gone, abs=0.02)


def test_the_start_law_knows_where_everybody_came_from():
    counts = panel_tally(panel(500), STATES)
    part = fit(counts, model="second_order").schedule.components[0]
    last = counts.table("contexts").query("period == @counts.meta.last - 1 and next_state == 1")
    shares = last.groupby("state")["n"].sum() / last["n"].sum()
    assert sorted(part.start[1][part.start[1] > 0]) == pytest.approx(sorted(shares))
