"""The size of a trial: published and simulated power, duration by hand."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector import planned_numbers
from cohortflow.states import States
from cohortflow.whatif import Change, trial_size
from cohortflow.whatif.arm_rows import touching
from cohortflow.whatif.trial_size import departures_needed
from tests.projector_cases import CHAIN

QWL = States(["quiet", "weekly", "left"], exits=["left"])
CHAIN3 = Chain(QWL, [[0.68, 0.12, 0.2], [0.1, 0.9, 0], [0, 0, 1]])
UP = Change("quiet", "weekly", add=0.05)
START = {"quiet": 400, "weekly": 2000}


def test_the_textbook_formula():
    # Fleiss, Levin & Paik (2003), eq. 4.14 without continuity correction (MEMORY, recomputed):
    # n = (z_a sqrt(2 pq) + z_b sqrt(p1 q1 + p2 q2))^2 / d^2
    p1, p2, za, zb = 0.12, 0.17, 1.959964, 0.841621
    mean = (p1 + p2) / 2
    n = (za * np.sqrt(2 * mean * (1 - mean)) + zb * np.sqrt(p1 * (1 - p1) + p2 * (1 - p2))) ** 2 / (
        p2 - p1
    ) ** 2
    assert departures_needed(0.12, 0.17, power=0.8, level=0.95) == pytest.approx(n, rel=1e-4)


@pytest.mark.parametrize("rate, under, ratio", [(0.12, 0.17, 1.0), (0.05, 0.02, 1.0), (0.3, 0.4, 2.0)])
def test_simulated_power(rate, under, ratio):
    # oracle: two binomials drawn 4,000 times, tested by inverting Newcombe's interval as compare_arms does
    n = int(np.ceil(departures_needed(rate, under, power=0.8, level=0.95, ratio=ratio)))
    m = int(n * ratio)
    rng = np.random.default_rng(11)
    a, c = rng.binomial(n, under, 4000) / n, rng.binomial(m, rate, 4000) / m
    seen = touching(a, np.full(4000, float(n)), c, np.full(4000, float(m)), np.inf) < 0.05
    assert seen.mean() == pytest.approx(0.8, abs=0.03)


def test_duration_by_hand():
    # quiet at the start of each month: 400, .68 x 400 + .1 x 2000 = 472, then 472 x .68 + .1 x 1848 = 505.76
    need = trial_size(CHAIN3, UP, start=START)
    assert need.at_risk[:3] == pytest.approx([400, 472, 505.76]) and need.departures == pytest.approx(
        777.3, abs=0.1
    )
    half = np.cumsum(need.at_risk) / 2
    assert need.periods == np.argmax(half >= need.departures) + 1 == 4
    assert need.rate == 0.12 and need.rate_under == pytest.approx(0.17) and need.design_effect == 1
    frame = need.to_frame().iloc[0]
    assert frame["departures_control"] == pytest.approx(frame["departures"])
    assert need.about() == {"power": 0.8, "level": 0.95, "share": 0.5}


def test_design_effect_share_and_joiners():
    assert trial_size(CHAIN3, UP, start=START, design_effect=2.0).departures == pytest.approx(
        2 * 777.3, abs=0.2
    )
    small = trial_size(CHAIN3, UP, start=START, share=0.2)
    assert small.departures < 777 and small.to_frame()["departures_control"][0] == pytest.approx(
        4 * small.departures
    )
    coming = planned_numbers(QWL, {"quiet": 100}, periods=2)
    longer = trial_size(CHAIN3, UP, start=START, joiners=coming)
    assert longer.at_risk[1] == pytest.approx(572) and longer.at_risk[-1] > need_at_end(coming)


def need_at_end(coming):
    return trial_size(CHAIN3, UP, start=START).at_risk[-1] + coming.a_period()[0]


def test_a_trial_without_end_and_one_too_small():
    short = trial_size(CHAIN3, UP, start={"quiet": 5}, periods=6)
    assert short.periods == np.inf and "longer than looked ahead" in repr(short)
    with pytest.raises(NotIdentified, match="too small to be seen with 1e.09 departures an arm"):
        departures_needed(0.12, 0.12000001, power=0.8, level=0.95)
    assert departures_needed(0.001, 0.999, power=0.5, level=0.9) == 2.0


def test_the_fits_design_effect():
    from cohortflow.estimator import fit
    from cohortflow.estimator.covariance import design_effects
    from tests.test_whatif_arm_rows import trial

    model = fit(trial())
    found = trial_size(model, Change("dull", "lively", add=0.05), start={"dull": 100})
    expected = design_effects(model.rates, model.covariance("customer"))[1, 0]
    assert found.design_effect == pytest.approx(max(1.0, expected))


def test_arguments():
    with pytest.raises(CallError, match="share is 1; it must lie strictly between 0 and 1"):
        trial_size(CHAIN3, UP, share=1)
    with pytest.raises(CallError, match="planned for one move; name the state"):
        trial_size(CHAIN, Change("all_live", "left", add=0.01), start={"steady": 10})
    with pytest.raises(CallError, match="changes nothing, so there is nothing to see"):
        trial_size(CHAIN3, Change("quiet", "weekly", multiply=1.0), start=START)
