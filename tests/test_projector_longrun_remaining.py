"""The mix of those remaining: published ladders and walks, kinds of customers."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.projector.longrun import long_run
from cohortflow.projector.mix import step_counts
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    SEPTEMBER,
    STATES,
    P,
    seasonal,
    two_types,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_recency_ladder_of_those_remaining():
    # Pfeifer & Carraway (2000) ladder; lambda and mix recomputed (companion of Darroch & Seneta 1965)
    states = States(["r1", "r2", "r3", "r4", "gone"], exits=["gone"])
    rows = [
        [0.3, 0.7, 0, 0, 0],
        [0.2, 0, 0.8, 0, 0],
        [0.15, 0, 0, 0.85, 0],
        [0.05, 0, 0, 0, 0.95],
        [0, 0, 0, 0, 1],
    ]
    found = long_run(Chain(states, rows))
    assert found.verdict == "exits_only"
    assert found.value("remaining_retention") == pytest.approx(0.720123920581, abs=1e-11)
    mix = [0.231130327849, 0.224671372343, 0.249591900419, 0.294606399389]
    assert list(shares(found, "remaining_mix", "").values()) == pytest.approx(mix, abs=1e-11)


def test_killed_walk_keeps_cos_pi_over_n():
    # Darroch & Seneta (1965): walk on 0..4 killed at its ends, lambda = cos(pi/4), mix ~ sin(i pi/4) (MEMORY)
    states = States(list("abcde"), exits=["a", "e"])
    walk = np.eye(5)
    for i in (1, 2, 3):
        walk[i] = 0
        walk[i, i - 1] = walk[i, i + 1] = 0.5
    found = long_run(Chain(states, walk))
    assert found.value("remaining_retention") == pytest.approx(np.cos(np.pi / 4), abs=1e-14)
    mix = list(shares(found, "remaining_mix", "").values())
    assert mix == pytest.approx([0.29289322, 0.41421356, 0.29289322], abs=5e-9)
    assert set(found.to_frame().query("measure == 'remaining_mix'")["note"]) == {"periodic"}


def test_seasons_of_a_base_that_loses_people():
    matrices = [P, OTHER, P]
    schedule = seasonal(matrices)
    found = long_run(schedule, joiners={"fresh": 10}, base_period=SEPTEMBER)
    frame = found.to_frame()
    base = frame.query("measure == 'settled_base' and state == 'steady'")["value"].tolist()
    far = step_counts(schedule, {"fresh": 10}, 902, [10, 0, 0, 0, 0])[900:, 1]
    assert base == pytest.approx(far.tolist(), rel=1e-9)
    x = np.array([0, 1.0, 0])
    for k in range(300):
        x = x @ matrices[k % 3][:3, :3]
        x = x / x.sum()
    mix = frame.query("measure == 'remaining_mix'")["value"].to_numpy().reshape(3, 3)
    np.testing.assert_allclose(mix[0], x, atol=1e-12)
    product = np.linalg.multi_dot([m[:3, :3] for m in matrices])
    top = np.abs(np.linalg.eigvals(product)).max() ** (1 / 3)
    assert found.value("remaining_retention") == pytest.approx(top)


def test_of_two_kinds_the_sticky_remain():
    schedule, _ = two_types()
    found = long_run(schedule, joiners={"here": 10})
    assert found.value("remaining_retention") == pytest.approx(0.98)
    assert found.to_frame().query("measure == 'remaining_mix'")["note"].tolist() == ["component:sticky"]
    # half of ten a period stay 50 periods, half 5: 5 x 50 + 5 x 5
    assert found.value("settled_base", "all_live") == pytest.approx(275)


def test_what_does_not_reach_the_row_without_data_stays_defined():
    gap = P.copy()
    gap[0] = np.nan  # nobody becomes fresh again, so steady and paused are as before
    found, full = long_run(Chain(STATES, gap), joiners={"steady": 5}), long_run(CHAIN, joiners={"steady": 5})
    assert found.verdict == "exits_only"
    assert found.value("remaining_retention") == pytest.approx(full.value("remaining_retention"))
    assert found.value("settled_base", "all_live") == pytest.approx(full.value("settled_base", "all_live"))
    frame = found.to_frame()
    assert frame.loc[frame["note"] == "rows_without_data", "from"].tolist() == ["fresh"]
