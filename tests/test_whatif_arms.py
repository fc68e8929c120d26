"""Arms compared: derived figures by bootstrap and by hand, the roll-out, size and coverage by simulation."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector import step_counts, value
from cohortflow.whatif import compare_arms
from tests.bench.worlds import panel_tally, simulate
from tests.test_whatif_arm_rows import CALLED, LDC, USUAL, trial

MONEY = {"per_period": {"lively": 10.0}, "timing": "middle"}
LAW = np.array([0.6, 0.4, 0.0])


def test_figures_are_those_of_each_arms_own_chain():
    tally = trial()
    found = compare_arms(
        tally, column="group", control="a", horizon=4, start=100 * LAW, value=MONEY, draws=50
    )
    rows = found.rows
    for arm, column in (("a", "control"), ("b", "treated")):
        chain = Chain(LDC, rows.matrices(rows.counts.P, arm))
        kept = step_counts(chain, LAW, 4)[1:, :2].sum(axis=1)
        assert found.of("retention")[column].to_numpy() == pytest.approx(kept)
        worth = value(chain, start=100 * LAW, horizon=4, **MONEY).sums["base"][0] / 100
        assert found.of("value")[column].iloc[0] == pytest.approx(worth)
        live = step_counts(chain, 100 * LAW, 4)[1:, :2].sum(axis=1)
        rolled = found.of("rollout", quantity="all_live")
        assert rolled[column].to_numpy() == pytest.approx(live)
    assert set(found.of("rollout")["quantity"]) == {"all_live", "left", "value"}


def test_errors_of_derived_figures_against_a_bootstrap_of_customers():
    rng = np.random.default_rng(8)
    panels = [simulate(P, rng.integers(0, 2, 400), 6, rng) for P in (USUAL, CALLED)]
    codes = np.repeat([0, 1], 400)
    tally = panel_tally(np.vstack(panels), LDC, segment=codes)
    found = compare_arms(
        tally, column="group", control="a", horizon=6, start=LAW, value=MONEY, level=0.95, draws=200
    )
    sample = []
    for _ in range(300):
        figures = []
        for panel in panels:
            drawn = panel[rng.integers(0, 400, 400)]
            N = np.zeros((3, 3))
            for t in range(5):
                seen = (drawn[:, t] >= 0) & (drawn[:, t] < 2) & (drawn[:, t + 1] >= 0)
                np.add.at(N, (drawn[seen, t], drawn[seen, t + 1]), 1)
            N[2, 2] = 1
            P = N / N.sum(axis=1, keepdims=True)
            figures.append((LAW @ np.linalg.matrix_power(P, 6))[:2].sum())
        sample.append(figures[1] - figures[0])
    last = found.of("retention", periods_ahead=6).iloc[0]
    assert (last["high"] - last["low"]) / (2 * 1.96) == pytest.approx(np.std(sample), rel=0.15)
    rolled = found.of("rollout", quantity="all_live", periods_ahead=6).iloc[0]
    assert (rolled["high"] - rolled["low"]) / (2 * 1.96) == pytest.approx(np.std(sample), rel=0.2)


def test_multiplicity_is_said_and_adjusted_over_all_moves():
    found = compare_arms(trial(third=True), column="group", control="a", horizon=3, start=LAW, draws=20)
    moves = found.of("move")
    assert found.tests == moves["p_value"].notna().sum() == 12  # two arms, six moves each
    assert (moves["p_adjusted"] >= moves["p_value"]).all()
    assert moves.loc[moves["arm"] == "b", "p_adjusted"].min() < 0.05
    assert moves.loc[moves["arm"] == "c", "p_adjusted"].min() > 0.05
    assert "of 12 moves differ (95%, adjusted by Holm" in repr(found)
    assert found.about()["arms"] == ["b", "c"] and found.about()["covariance"] == "customer"
    assert found.of("value").empty and len(found.to_frame().columns) == 16


def test_restricting_the_treated_states_sharpens_the_answer():
    tally = trial()
    wide = compare_arms(tally, column="group", control="a", horizon=6, start=LAW, draws=200)
    sharp = compare_arms(
        tally, column="group", control="a", horizon=6, start=LAW, draws=200, treated=["dull"]
    )
    width = [r.of("retention", periods_ahead=6).eval("high - low").iloc[0] for r in (wide, sharp)]
    assert width[1] < width[0] and sharp.about()["treated"] == ["dull"] and sharp.tests == 3


def test_a_roll_out_with_joiners():
    found = compare_arms(
        trial(), column="group", control="a", horizon=3, start=100 * LAW, joiners={"lively": 10}, draws=50
    )
    chain = Chain(LDC, found.rows.matrices(found.rows.counts.P, "b"))
    live = step_counts(chain, 100 * LAW, 3, [10, 0, 0])[1:, :2].sum(axis=1)
    assert found.of("rollout", quantity="all_live")["treated"].to_numpy() == pytest.approx(live)


@pytest.mark.slow
def test_size_and_coverage_over_simulated_trials():
    # no effect: the adjusted p-values stay above .1 in about 90 % of trials or more; with one: limits hold the truth
    quiet, covered, truth = [], [], CALLED[1, 0] - USUAL[1, 0]
    for seed in range(80):
        rng = np.random.default_rng(1000 + seed)
        for effect, kept in ((USUAL, quiet), (CALLED, covered)):
            panels = [simulate(P, rng.integers(0, 2, 120), 6, rng) for P in (USUAL, effect)]
            tally = panel_tally(np.vstack(panels), LDC, segment=np.repeat([0, 1], 120))
            found = compare_arms(tally, column="group", control="a", horizon=1, start=LAW, level=0.9, draws=2)
            moves = found.of("move")
            if effect is USUAL:
                kept.append(moves["p_adjusted"].min() > 0.1)
            else:
                one = moves[(moves["from"] == "dull") & (moves["to"] == "lively")].iloc[0]
                kept.append(one["low"] < truth < one["high"])
    assert np.mean(quiet) > 0.79  # nominal .9; three standard errors of 80 trials are .1
    assert 0.79 < np.mean(covered) < 0.99


def test_arguments():
    with pytest.raises(CallError, match="control is"):
        compare_arms(trial(), column="group", control="z")
    with pytest.raises(CallError, match='Unknown state "dul" .did you mean "dull"'):
        compare_arms(trial(), column="group", control="a", treated=["dul"])
    assert isinstance(
        compare_arms(trial(), column="group", control="a", horizon=1, draws=2).to_frame(), pd.DataFrame
    )


def test_states_that_nobody_left_stop_what_follows():
    panel = np.array([[0, 0, 2], [0, 0, 1], [0, 0, 0], [0, 2, -1]])  # dull is entered once, in the last period
    tally = panel_tally(panel, LDC, segment=np.array([0, 0, 1, 1]))
    with pytest.raises(NotIdentified, match='passes through "dull", and no departure from there was counted'):
        compare_arms(tally, column="group", control="a", horizon=2, start={"lively": 10}, draws=2)
