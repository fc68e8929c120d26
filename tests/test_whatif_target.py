"""Targets by name, what each needs, and every refusal."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector import planned_numbers
from cohortflow.whatif.target import named, resolve
from tests.projector_cases import CHAIN, SEPTEMBER, STATES
from tests.whatif_cases import JOINERS, MONEY, START


def test_names_and_what_they_are_of():
    assert named("base") == ("base", "all_live") and named("base:steady") == ("base", "steady")
    assert named("life") == ("life", "joiners") and named("value") == ("value", "base")
    with pytest.raises(CallError, match='Unknown target "bse" .did you mean "base"'):
        named("bse")
    with pytest.raises(CallError, match='"remaining_mix" needs a state or total'):
        named("remaining_mix")
    with pytest.raises(CallError, match='is of everybody who remains; it takes no "steady"'):
        named("remaining_retention:steady")


def test_a_target_is_resolved_with_what_it_needs():
    found = resolve(
        CHAIN, "base:busy", horizon=4, start=START, joiners=JOINERS, totals={"busy": ["fresh", "steady"]}
    )
    assert (
        found.weight.tolist() == [1, 1, 0, 0, 0]
        and found.inflow.shape == (4, 5)
        and found.code == "base:busy"
    )
    coming = planned_numbers(STATES, JOINERS, periods=6, base=SEPTEMBER)
    assert resolve(CHAIN, "settled_base", joiners=coming).constant.tolist() == [25, 5, 0, 0, 0]
    assert resolve(CHAIN, "life", joiners=JOINERS).start == pytest.approx([25 / 30, 5 / 30, 0, 0, 0])
    assert resolve(CHAIN, "value:joiners", joiners=JOINERS, value=MONEY).start.tolist() == [25, 5, 0, 0, 0]
    assert resolve(CHAIN, "value:paused", value=MONEY).start.tolist() == [0, 0, 1, 0, 0]
    assert resolve(CHAIN, "remaining_retention").code == "remaining_retention"


@pytest.mark.parametrize("name, more, message", [
    ("base", {"start": START}, "is a figure at a horizon: pass horizon="),
    ("value:total", {"start": START, "value": MONEY}, "is a figure at a horizon"),
    ("base", {"horizon": 2}, "needs opening counts"),
    ("settled_base", {}, "needs joiners="),
    ("life", {}, "needs joiners="),
    ("life", {"joiners": np.zeros(5)}, "the joiners are 0"),
    ("value:steady", {}, "is about money; say how money is counted"),
    ("base:stedy", {"horizon": 2, "start": START}, 'Unknown quantity "stedy" .did you mean "steady"'),
    ("life:left", {}, '"life" is not of "left"'),
    ("value:nobody", {"value": MONEY}, '"value" is not of "nobody"'),
])  # fmt: skip
def test_what_is_missing_is_said(name, more, message):
    with pytest.raises(CallError, match=message):
        resolve(CHAIN, name, **more)


def test_a_model_without_any_data_has_no_target():
    from cohortflow.chain import Chain

    empty = Chain(STATES, np.vstack([np.full((3, 5), np.nan), np.eye(5)[3:]]))
    with pytest.raises(NotIdentified, match="A target needs rates"):
        resolve(empty, "life:steady")
