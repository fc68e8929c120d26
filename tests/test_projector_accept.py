"""The projector's door: models, counts, periods; every refusal says what to do."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector import accept
from tests.projector_cases import CHAIN, MONTHS, SEPTEMBER, STATES, P, multinomial, seasonal


def test_a_model_is_a_chain_a_schedule_or_what_carries_one():
    assert accept.as_schedule(CHAIN) is CHAIN.schedule
    assert accept.as_schedule(CHAIN.schedule) is CHAIN.schedule
    assert accept.as_schedule(SimpleNamespace(schedule=CHAIN.schedule)) is CHAIN.schedule
    with pytest.raises(CallError, match="A model is a Chain, a Schedule or a Fit; got ndarray"):
        accept.as_schedule(P)


def test_counts_by_name_or_by_place():
    assert accept.as_counts(pd.Series({"paused": 2, "fresh": 1}), STATES).tolist() == [1, 0, 2, 0, 0]
    assert accept.as_counts([1, 2, 3, 0, 0], STATES).tolist() == [1, 2, 3, 0, 0]
    with pytest.raises(CallError, match=r'Unknown state "pauzed" \(did you mean "paused"'):
        accept.as_counts({"pauzed": 1}, STATES)
    with pytest.raises(
        CallError, match=r"start has shape \(2,\); it takes one number for each of the 5 states"
    ):
        accept.as_counts([1, 2], STATES)
    with pytest.raises(CallError, match='start of state "steady" is -1; it must be a number not below 0'):
        accept.as_counts([0, -1, 0, 0, 0], STATES)


def test_an_opening_holds_nobody_who_has_left():
    with pytest.raises(CallError, match='start holds 3 customers in the exit "left"'):
        accept.opening(CHAIN, {"left": 3}, STATES)
    with pytest.raises(CallError, match="A projection needs opening counts"):
        accept.opening(CHAIN, None, STATES)


def test_base_period_from_label_series_name_or_nothing():
    assert accept.base_period(CHAIN, None, "2026-09", MONTHS) == SEPTEMBER
    assert accept.base_period(CHAIN, pd.Series({"fresh": 1}, name="2026-09"), None, MONTHS) == SEPTEMBER
    assert accept.base_period(CHAIN, None, None, MONTHS) is None


def test_first_step_counts_from_the_models_first_period():
    cycle = seasonal([P] * 12)
    assert accept.first_step(cycle, SEPTEMBER + 3) == 3 and accept.first_step(cycle, SEPTEMBER - 1) == -1
    assert accept.first_step(CHAIN.schedule, SEPTEMBER) == 0 == accept.first_step(cycle, None)
    held = seasonal([P, P], tail="hold")
    with pytest.raises(
        CallError, match="The model's matrices begin in 2026-09, after the base period 2026-07"
    ):
        accept.first_step(held, SEPTEMBER - 2)


def test_covariance_is_given_or_asked_of_a_fit_made_of_its_pooled_rates():
    given = multinomial(P, 100)
    assert accept.covariance_of(CHAIN) is None and accept.covariance_of(CHAIN, given) is given
    fit = SimpleNamespace(schedule=CHAIN.schedule, P=P, covariance=lambda kind="own": kind)
    assert accept.covariance_of(fit) == "own" and accept.covariance_of(fit, "two_way") == "two_way"
    shrunk = SimpleNamespace(schedule=CHAIN.schedule, P=np.eye(5), covariance=lambda kind="own": kind)
    assert accept.covariance_of(shrunk) is None
    assert accept.covariance_of(seasonal([P, P]), given) is None
    with pytest.raises(CallError, match='covariance="two_way" is asked of a Fit'):
        accept.covariance_of(CHAIN, "two_way")


def test_draws_are_given_or_asked_for():
    rng = np.random.default_rng(1)
    fit = SimpleNamespace(draws=lambda n, rng, covariance="own": (n, covariance))
    assert accept.draws_of(fit, 7, rng, None) == (7, "own")
    assert accept.draws_of(fit, 7, rng, "two_way") == (7, "two_way")
    assert accept.draws_of(CHAIN, 7, rng, None) is None
    with pytest.raises(CallError, match="draws is 1; it takes Draws, or a whole number of draws, at least 2"):
        accept.draws_of(fit, 1, rng, None)


def test_small_arguments():
    generator = np.random.default_rng(3)
    assert accept.as_rng(generator) is generator
    for bad in (-1, True, "1"):
        with pytest.raises(CallError, match="rng is .*; it takes a whole number not below 0"):
            accept.as_rng(bad)
    for bad in (0, 1, 90, True):
        with pytest.raises(CallError, match="level is .*; it must lie strictly between 0 and 1"):
            accept.as_level(bad)
    for bad in (0, 1.5, True):
        with pytest.raises(CallError, match="periods is .*; it must be a whole number, at least 1"):
            accept.as_periods(bad)


def test_totals_are_sums_of_those_who_are_there():
    found = accept.weights_of(STATES, {"boxes": ["fresh", "steady"]})
    assert list(found) == ["fresh", "steady", "paused", "all_live", "boxes"]
    assert found["all_live"].tolist() == [1, 1, 0, 0, 0] == found["boxes"].tolist()
    with pytest.raises(CallError, match='takes a list of states, not the text "fresh"'):
        accept.weights_of(STATES, {"boxes": "fresh"})
    for name in ("steady", "all_live"):
        with pytest.raises(CallError, match="has the name of a state or of a fixed total"):
            accept.weights_of(STATES, {name: ["fresh"]})
    with pytest.raises(CallError, match='"left" is an exit'):
        accept.weights_of(STATES, {"boxes": ["fresh", "left"]})


def test_a_model_without_a_single_departure_is_refused():
    empty = np.vstack([np.full((3, 5), np.nan), np.eye(5)[3:]])
    with pytest.raises(
        NotIdentified, match="A projection needs rates, and no state has a single observed departure"
    ):
        accept.refuse_unknown(Chain(STATES, empty).schedule, "A projection")
