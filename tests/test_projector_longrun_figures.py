"""Limits, cycles and time averages: published chains, seasons against brute force, laws."""

import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.chain import Chain
from cohortflow.projector.longrun import long_run
from cohortflow.projector.mix import step_counts
from cohortflow.states import States
from tests.projector_cases import (
    MONTHS,
    SEPTEMBER,
    P,
    chains,
    seasonal,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_ehrenfest_has_no_limit_but_a_time_average():
    # Ehrenfest n = 4, period 2: pi = (1,4,6,4,1)/16  (Grinstead & Snell, VERIFIED)
    urn = np.zeros((5, 5))
    for i in range(5):
        if i:
            urn[i, i - 1] = i / 4
        if i < 4:
            urn[i, i + 1] = 1 - i / 4
    found = long_run(Chain(States(list("abcde")), urn))
    assert found.verdict == "no_limit" and "periodic_group:a+b+c+d+e" in found.reasons
    assert found.value("group_period", "", "group 1") == 2
    assert list(shares(found, "time_average", "a").values()) == pytest.approx(np.array([1, 4, 6, 4, 1]) / 16)
    frame = found.to_frame()
    assert frame.loc[frame["measure"] == "limit_from_start", "note"].unique().tolist() == ["no_limit"]
    assert found.value("periods_to_settle", "", "a") == np.inf


def test_seasons_settle_into_a_mix_for_each_month():
    one = np.array([[0.9, 0.1], [0.3, 0.7]])
    two = np.array([[0.6, 0.4], [0.3, 0.7]])
    schedule = seasonal([one] * 11 + [two], states=States(["a", "b"]))
    found = long_run(schedule, base_period=SEPTEMBER + 3)
    assert found.verdict == "unique_cycle"
    frame = (
        found.to_frame().query("measure == 'stationary_share' and state == 'a'").set_index("note")["value"]
    )
    x = step_counts(schedule, [1, 0], 12 * 40 + 12)[
        12 * 40 :, 0
    ]  # brute force: forty years on, from September
    for k in range(12):
        month = MONTHS.position(SEPTEMBER + k) + 1
        assert frame[f"position:{month}"] == pytest.approx(x[k], abs=1e-12)
    limits = found.to_frame().query("measure == 'limit_from_start' and state == 'a' and `from` == 'b'")
    assert sorted(limits["value"]) == pytest.approx(sorted(frame))
    assert found.value("time_average", "a", "a") == pytest.approx(x[:12].mean())


@settings(max_examples=30, deadline=None)
@given(chains(exits=0))
def test_stationary_laws_stay_and_return_times_invert_them(chain):
    found = long_run(chain)
    pi = np.array(list(shares(found, "stationary_share", "group 1").values()))
    np.testing.assert_allclose(pi @ chain.matrix, pi, atol=1e-12)
    times = np.array([found.value("return_time", s, s) for s in chain.states.names])
    np.testing.assert_allclose(pi * times, 1, rtol=1e-12)
