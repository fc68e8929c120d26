"""A Schedule seen from a base period: groups, verdicts."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Component, Schedule
from cohortflow.projector.longrun import long_run
from cohortflow.states import States
from tests.projector_cases import (
    MONTHS,
    STATES,
    P,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_ten_states_in_three_closed_groups():
    # Feres' ten-state chain, R markovchain vignette 4.3-4.5 (VERIFIED): recurrence a 1.5 c 3, b 2.555556
    # g 2.875 i 3.833333, f 1; recomputed: from h 1/3 into {a,c}, 2/3 into {b,g,i}
    third = 1 / 3
    rows = [
        [0.5, 0, 0.5, 0, 0, 0, 0, 0, 0, 0],
        [0, third, 0, 0, 0, 0, 2 * third, 0, 0, 0],
        [1, 0, 0, 0, 0, 0, 0, 0, 0, 0],
        [0, 0, 0, 0, 1, 0, 0, 0, 0, 0],
        [0, 0, 0, third, third, 0, 0, 0, third, 0],
        [0, 0, 0, 0, 0, 1, 0, 0, 0, 0],
        [0, 0, 0, 0, 0, 0, 0.25, 0, 0.75, 0],
        [0, 0, 0.25, 0.25, 0, 0, 0, 0.25, 0, 0.25],
        [0, 1, 0, 0, 0, 0, 0, 0, 0, 0],
        [0, third, 0, 0, third, 0, 0, 0, 0, third],
    ]
    found = long_run(Chain(States(list("abcdefghij")), rows))
    assert found.verdict == "depends_on_start"
    assert found.reasons == ("closed_group:a+c", "closed_group:b+g+i", "closed_group:f", "several_groups")
    times = {s: found.value("return_time", s, s) for s in "acbgif"}
    published = {"a": 1.5, "c": 3, "b": 2.555556, "g": 2.875, "i": 3.833333, "f": 1}
    assert times == pytest.approx(published, abs=5e-7)
    limit = shares(found, "limit_from_start", "h")
    assert limit["a"] + limit["c"] == pytest.approx(1 / 3)
    assert limit["b"] + limit["g"] + limit["i"] == pytest.approx(2 / 3)


def test_a_live_group_beside_exits_depends_on_the_start():
    states = States(["a", "b", "gone"], exits=["gone"])
    found = long_run(Chain(states, [[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]]))
    assert found.verdict == "depends_on_start"
    assert found.reasons == ("closed_group:b", "exits_reachable")
    assert shares(found, "limit_from_start", "a") == pytest.approx({"a": 0, "b": 0.6, "gone": 0.4})


def test_those_who_never_move_form_groups_of_their_own():
    states = States(["a", "b"])
    half = np.diag([0.5, 0.5])
    movers = Component(np.array([[[0.8, 0.2], [0.4, 0.6]]]), [0, 1], half, half, name="movers")
    stayers = Component(np.eye(2)[None], [0, 1], half, half, name="stayers")
    found = long_run(Schedule(states, (movers, stayers), MONTHS))
    assert found.verdict == "depends_on_start" and "several_groups" in found.reasons
    # half of those in a are movers and end 2/3 in a
    assert shares(found, "limit_from_start", "a") == pytest.approx({"a": 0.5 + 0.5 * 2 / 3, "b": 0.5 / 3})


def test_rows_without_data_are_said():
    gap = P.copy()
    gap[2] = np.nan
    found = long_run(Chain(STATES, gap), joiners={"fresh": 1})
    frame = found.to_frame()
    assert found.verdict == "not_identified" and found.reasons[-1] == "rows_without_data:paused"
    assert (frame["note"] == "rows_without_data").all() and frame["value"].isna().all()
