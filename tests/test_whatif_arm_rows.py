"""Rows of the arms, their joint covariance, and differences of single rates."""

import numpy as np
import pytest
from scipy import optimize, special
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import confint_proportions_2indep

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit
from cohortflow.states import States
from cohortflow.whatif.arm_rows import arm_rows, choose_arms, holm, move_differences, newcombe, touching
from tests.bench.worlds import panel_tally, simulate

LDC = States(["lively", "dull", "left"], exits=["left"])
USUAL = np.array([[0.8, 0.15, 0.05], [0.3, 0.6, 0.1], [0, 0, 1.0]])
CALLED = np.array([[0.8, 0.15, 0.05], [0.45, 0.5, 0.05], [0, 0, 1.0]])


def trial(customers=300, periods=8, seed=1, third=False):
    """Tally with the arms a (usual), b (called) and, if asked, c (usual) as values of the column "group"."""
    rng = np.random.default_rng(seed)
    panels = [
        simulate(P, rng.integers(0, 2, customers), periods, rng)
        for P in (USUAL, CALLED, USUAL)[: 3 if third else 2]
    ]
    codes = np.repeat(np.arange(len(panels)), customers)
    return panel_tally(np.vstack(panels), LDC, segment=codes)


def test_each_arm_has_its_own_rates():
    tally = trial()
    rows = arm_rows(tally, "group", ["a", "b"], starts=None, treated=LDC.remaining, kind="customer")
    alone = tally.by_segment("group")
    for arm in ("a", "b"):
        assert rows.matrices(rows.counts.P, arm)[:2] == pytest.approx(fit(alone[arm]).P[:2])
    # the joint covariance holds each arm's own: same scores, G/(G-1) with all buckets instead of the arm's
    own = fit(alone["b"]).covariance("customer")
    block = rows.cov.matrix.reshape(9, 3, 9, 3)[3:5, :, 3:5, :]
    scale = (600 / 599) / (own.groups["buckets"] / (own.groups["buckets"] - 1))
    expected = own.matrix.reshape(3, 3, 3, 3)[:2, :, :2, :] * scale
    assert block == pytest.approx(expected, rel=5e-3)


def test_untreated_states_have_everybodys_rates():
    tally = trial(third=True)
    rows = arm_rows(tally, "group", ["a", "b"], starts=None, treated=["dull"], kind="customer")
    everybody = fit(tally).P
    for arm in ("a", "b"):
        assert rows.matrices(rows.counts.P, arm)[0] == pytest.approx(everybody[0])  # c too
    assert rows.matrices(rows.counts.P, "b")[1] == pytest.approx(fit(tally.by_segment("group")["b"]).P[1])
    slope = rows.spread(np.arange(9.0).reshape(3, 3), "b")
    assert (
        slope[6].tolist() == [0, 1, 2] and slope[4].tolist() == [3, 4, 5] and slope[8].tolist() == [0, 0, 0]
    )


def test_only_moves_since_the_start_count():
    tally = trial()
    rows = arm_rows(tally, "group", ["a", "b"], starts=5, treated=LDC.remaining, kind="customer")
    later = fit(tally.by_segment("group")["b"].between(4)).P  # a move into period 5 starts in 4
    assert rows.matrices(rows.counts.P, "b")[:2] == pytest.approx(later[:2])
    with pytest.raises(NotIdentified, match="No move was counted since the experiment began"):
        arm_rows(tally, "group", ["a", "b"], starts=99, treated=LDC.remaining, kind="customer")


def test_a_state_that_an_arm_never_left_is_pooled_and_said():
    panel = np.array([[0, 0, 2], [0, 1, 0], [0, 0, 0], [0, 2, -1]])
    tally = panel_tally(panel, LDC, segment=np.array([0, 0, 1, 1]))
    rows = arm_rows(tally, "group", ["a", "b"], starts=None, treated=LDC.remaining, kind="customer")
    assert rows.notes == ("pooled_row:dull",) and rows.treated == ("lively",)
    alone = panel_tally(np.array([[0, 0], [1, 1]]), LDC, segment=np.array([0, 1]))
    with pytest.raises(NotIdentified, match='arms "a", "b" have no state in common'):
        arm_rows(alone, "group", ["a", "b"], starts=None, treated=LDC.remaining, kind="customer")


def test_newcombe_is_statsmodels():
    n = np.array([70.0, 10, 56])
    x, m, y = np.array([56.0, 9, 15]), np.array([80.0, 10, 48]), np.array([48.0, 3, 0])
    low, high = newcombe(x / n, n, y / m, m, special.ndtri(0.975))
    for k in range(3):
        expected = confint_proportions_2indep(x[k], n[k], y[k], m[k], method="newcomb", compare="diff")
        assert (low[k], high[k]) == pytest.approx(expected, abs=1e-9)


def test_the_p_value_is_that_of_the_limit_that_touches_zero():
    p_a, p_c, n, m = np.array([0.3, 0.5]), np.array([0.2, 0.5]), np.array([120.0, 9]), np.array([150.0, 9])
    found = touching(p_a, n, p_c, m, np.inf)
    z = optimize.brentq(lambda z: newcombe(p_a[:1], n[:1], p_c[:1], m[:1], z)[0][0], 0.1, 9)
    assert found[0] == pytest.approx(2 * special.ndtr(-z)) and found[1] == 1
    assert touching(p_a, n, p_c, m, 20.0)[0] == pytest.approx(2 * special.stdtr(20, -z))
    # seen from the other side it is the same
    assert touching(p_c, m, p_a, n, np.inf) == pytest.approx(found)


def test_holm_is_statsmodels():
    p = np.random.default_rng(3).uniform(0, 0.3, 12)
    assert holm(p) == pytest.approx(multipletests(p, method="holm")[1])


def test_differences_use_effective_numbers():
    tally = trial()
    rows = arm_rows(tally, "group", ["a", "b"], starts=None, treated=LDC.remaining, kind="customer")
    frame = move_differences(rows, "b", quantile=1.96).set_index(["from", "to"])
    assert len(frame) == 6
    one = frame.loc[("dull", "lively")]
    assert one["difference"] == pytest.approx(one["treated"] - one["control"])
    assert one["low"] < one["difference"] < one["high"] and one["p_value"] < 0.01
    assert one["n_arm"] == rows.counts.at_risk[4]


def test_choosing_arms():
    from dataclasses import replace

    from cohortflow.tally import Tally

    tally = trial(third=True)
    with pytest.raises(
        CallError, match="Which column tells the arms. Segment columns here: .group.; declare one"
    ):
        choose_arms(tally, None, "a", None)
    with pytest.raises(CallError, match='control is "z"; it is one of the arms "a", "b", "c"'):
        choose_arms(tally, "group", "z", None)
    with pytest.raises(CallError, match='"z" is not an arm besides the control'):
        choose_arms(tally, "group", "a", ["b", "z"])
    with pytest.raises(CallError, match='There is no arm to compare with "a"'):
        choose_arms(tally, "group", "a", [])
    marked = Tally.build(replace(tally.meta, segment_columns=(("group", "arm"),)), dict(tally.tables))
    assert choose_arms(marked, None, "b", None) == ("group", ["b", "a", "c"])
