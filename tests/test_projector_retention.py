"""Retention: model curves by hand, the observed curve against statsmodels, the cohort triangle on paper."""

from types import SimpleNamespace

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector.observed import observed_retention
from cohortflow.projector.retention import entry_mix, retention
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    banded,
    dirichlet_draws,
    multinomial,
    tally_of_stays,
    two_types,
)


def stay(begin, length, leaves=True, last=6):
    """Joined in `begin`, seen for `length` periods, then left (or still there at the end)."""
    rows = [(p, "steady") for p in range(begin, min(begin + length, last + 1))]
    return ("joined", "", [*rows, (begin + length, "left")] if leaves and begin + length <= last else rows)


STAYS = [
    stay(1, 9),
    stay(1, 2),
    stay(1, 4),
    stay(2, 1),
    stay(2, 9),
    stay(3, 2),
    stay(4, 9),
    stay(5, 1),
    stay(6, 1),
]


def test_model_curve_by_hand():
    found = retention(CHAIN, periods=3)
    # fresh: keeps .8, then .9 of whoever is steady or paused
    np.testing.assert_allclose(found.model, [1, 0.8, 0.72, 0.648])
    assert list(found.by_entry) == ["fresh"] and np.isnan(found.low).all() and found.observed is None
    mixed = retention(CHAIN, periods=2, start={"fresh": 1, "steady": 1})
    np.testing.assert_allclose(mixed.model, [1, 0.85, 0.765])
    assert mixed.about()["entry"]["fresh"] == 0.5
    assert "retention over 2 periods (month): 76.5% by the model" in repr(mixed)


def test_two_kinds_and_tenure_bands():
    kept = retention(two_types()[0], periods=24).model[24]
    assert kept == pytest.approx(0.5 * 0.98**24 + 0.5 * 0.8**24)
    np.testing.assert_allclose(retention(banded()[0], periods=2).model, [1, 0.7, 0.63])


def test_beside_each_other_in_one_table():
    tally = tally_of_stays(STAYS)
    model = SimpleNamespace(schedule=CHAIN.schedule, tally=tally)
    frame = retention(model, periods=7).to_frame()
    assert frame["observed"].isna().tolist() == [False] * 6 + [True] * 2
    assert frame["immature"].tolist() == [False] * 5 + [True] * 3
    assert frame["model"].iloc[1] == pytest.approx(0.9)  # everybody joined as steady
    assert frame["periods_since_joining"].tolist() == list(range(8))


def test_model_interval_by_hand_and_by_draws():
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    found = retention(chain, periods=2, covariance=multinomial(chain.matrix, 400), level=0.95)
    # S_2 = .81, dS_2/dp = 1.8, se = 1.8 sqrt(.09/400); logit scale
    step = 1.959963984540054 * 1.8 * 0.015 / (0.81 * 0.19)
    odds = 0.81 / 0.19 * np.exp([-step, step])
    assert [found.low[2], found.high[2]] == pytest.approx(list(odds / (1 + odds)))
    M = dirichlet_draws(P, 800, 2000)
    by_draws = retention(CHAIN, periods=6, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]))
    by_delta = retention(CHAIN, periods=6, covariance=multinomial(P, 800))
    np.testing.assert_allclose(by_draws.low, by_delta.low, rtol=0.02)
    np.testing.assert_allclose(by_draws.high, by_delta.high, rtol=0.02)


def test_a_row_without_data_ends_the_curve():
    gap = P.copy()
    gap[2] = np.nan
    found = retention(Chain(STATES, gap), periods=4)
    # fresh -> steady -> paused -> (unknown): known for three periods
    np.testing.assert_allclose(found.model[:3], [1, 0.8, 0.72])
    assert np.isnan(found.model[3:]).all()


def test_entry_mix_from_joiners_or_the_entry_states():
    tally = tally_of_stays([*STAYS, ("joined", "", [(6, "fresh")])])
    assert entry_mix(tally, None, CHAIN.schedule).tolist() == pytest.approx([0.1, 0.9, 0, 0, 0])
    assert entry_mix(None, None, CHAIN.schedule).tolist() == [1, 0, 0, 0, 0]


def test_refusals():
    with pytest.raises(NotIdentified, match="Retention needs an exit"):
        retention(Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]]), periods=2)
    with pytest.raises(NotIdentified, match="Nobody is known to have joined within the window"):
        observed_retention(tally_of_stays([("unknown", "", [(1, "steady"), (2, "steady")])]))
    with pytest.raises(CallError, match="The entry mix adds up to 0"):
        retention(CHAIN, periods=2, start={"fresh": 0})
