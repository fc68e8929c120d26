"""The base that constant joiners keep up."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.projector.longrun import long_run
from cohortflow.projector.mix import step_counts
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    P,
    banded,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_settled_base_by_hand():
    # 10 fresh a period: fresh 10; steady m = 8 + .8 m + .5 q, paused q = .1 m + .4 q -> m = 480/7, q = 80/7
    found = long_run(CHAIN, joiners={"fresh": 10})
    base = shares(found, "settled_base", "")
    assert base == pytest.approx({"fresh": 10, "steady": 480 / 7, "paused": 80 / 7, "all_live": 550 / 7})
    assert sum(shares(found, "settled_mix", "").values()) == pytest.approx(1)
    far = step_counts(CHAIN, {"fresh": 10}, 400, [10, 0, 0, 0, 0])[400]
    assert far[:3] == pytest.approx([10, 480 / 7, 80 / 7])


def test_a_base_without_an_exit_grows_for_ever():
    chain = Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]])
    frame = long_run(chain, joiners={"a": 1}).to_frame().query("measure == 'settled_base'")
    assert frame["note"].tolist() == ["grows_without_limit"] and frame["value"].isna().all()


def test_expanded_states_are_reported_as_declared():
    schedule, _ = banded()
    found = long_run(schedule, joiners={"live": 10})
    # new 10, old 7 / .1 = 70
    assert found.value("settled_base", "live") == pytest.approx(80)
    assert found.value("remaining_retention") == pytest.approx(0.9)
