"""Drivers of moves: effects, profiles, separation, refusals."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.covariates import drivers
from cohortflow.projector import project
from tests.bench.worlds import CHAIN, STATES, panel_tally, shocked_rates, simulate

PERIODS = 20


def counts(seed=1, customers=4000, effect=0.8, wave=0.0):
    """Segment b has higher odds to leave; a series moves the odds of everybody."""
    rng = np.random.default_rng(seed)
    heat = np.sin(np.arange(PERIODS))
    half = customers // 2
    panels = []
    for extra in (0.0, effect):
        shift = extra + wave * heat[1:]
        rates = shocked_rates(CHAIN, STATES.exit_mask, shift, np.zeros((PERIODS - 1, 5, 5)))
        panels.append(
            simulate(rates, np.zeros(half, int), PERIODS, rng, entry=rng.integers(0, PERIODS - 1, half))
        )
    tally = panel_tally(np.vstack(panels), STATES, segment=np.repeat([0, 1], half))
    return tally, pd.DataFrame({"heat": heat}, index=range(PERIODS))


def test_an_attribute_alone_gives_each_segments_own_rates():
    # one binary attribute is saturated: the profile's chain is the segment's pooled matrix, the effect their gap
    tally, _ = counts()
    found = drivers(tally, ["group"])
    parts = {
        n: t.counts() / np.maximum(t.counts().sum(axis=1, keepdims=True), 1)
        for n, t in tally.by_segment("group").items()
    }
    for name in "ab":
        assert np.allclose(found.chain({"group": name}).matrix[:4], parts[name][:4], atol=1e-7)
    frame = found.to_frame().set_index(["from", "to", "value"])
    base = found.about()["baselines"]["group"]
    other = "b" if base == "a" else "a"
    gap = parts[other][1, 4] - parts[base][1, 4]
    row = frame.loc[("R", "C", other)]
    assert row["effect"] == pytest.approx(gap, abs=1e-7) and row["low"] < row["effect"] < row["high"]
    # standard error of a difference of shares, apart from customers' clustering
    n = {v: t.counts()[1].sum() for v, t in tally.by_segment("group").items()}
    error = np.sqrt(sum(parts[v][1, 4] * (1 - parts[v][1, 4]) / n[v] for v in "ab"))
    assert (row["high"] - row["low"]) / (2 * 1.96) == pytest.approx(error, rel=0.15)


def test_a_series_and_an_attribute_together_equal_statsmodels():
    tally, series = counts(wave=0.5)
    found = drivers(tally, ["group"], series=series)
    rows = tally.one_step[tally.one_step["state"] == 1]
    rows = rows.loc[rows.index.repeat(rows["n"])]
    base = found.about()["baselines"]["group"]
    other = (rows["segment"].to_numpy() == (0 if base == "b" else 1)).astype(float)
    heat = series["heat"].to_numpy()[rows["period"].to_numpy() + 1]
    X = np.column_stack([np.ones(len(rows)), other, heat])
    codes = np.unique(rows["next_state"], return_inverse=True)[1]
    theirs = sm.MNLogit(codes, X).fit(disp=0, tol=1e-12)
    model = found.models["R"]
    mine = model.logit.B - model.logit.B[0]
    assert np.allclose(mine[1:], theirs.params.T, atol=1e-6)
    frame = found.to_frame()
    effect = frame.query("`from` == 'R' and to == 'C' and covariate == 'heat'")["effect"].iloc[0]
    margins = theirs.get_margeff(at="overall").margeff
    assert effect == pytest.approx(margins[1, -1], abs=1e-6)


def test_profiles_feed_the_projector_and_averages_stand_for_what_is_not_named():
    tally, series = counts(wave=0.3)
    found = drivers(tally, ["group"], series=series)
    calm, hot = (found.chain({"group": "b"}, series={"heat": h}) for h in (-1.0, 1.0))
    assert hot.matrix[1, 4] > calm.matrix[1, 4]
    assert np.allclose(found.chain().matrix[1], tally.counts()[1] / tally.counts()[1].sum(), atol=1e-6)
    ahead = [project(c, start={"N": 100}, periods=6).mean[6, :4].sum() for c in (calm, hot)]
    assert ahead[0] > ahead[1]


def test_separation_is_said_and_its_limits_stay_open():
    panel = np.array([[0, 1, 1, 1]] * 60 + [[0, 1, 1, 4]] * 20 + [[0, 1, 2, 1]] * 20 + [[0, 1, 1, 1]] * 30)
    tally = panel_tally(panel, STATES, segment=np.repeat([0, 1], [100, 30]))
    frame = drivers(tally, ["group"]).to_frame().query("`from` == 'R' and to == 'C'")
    assert frame["note"].tolist() == ["separated"] and frame["low"].isna().all()
    assert "too_few:D" in drivers(tally, ["group"]).notes


def test_refusals():
    tally, series = counts(customers=400)
    with pytest.raises(CallError, match="at least one attribute or series"):
        drivers(tally)
    with pytest.raises(CallError, match='There is no segment "grup"'):
        drivers(tally, ["grup"])
    with pytest.raises(CallError, match='series "heat" has no value for 6 and 13 more periods'):
        drivers(tally, series=series.iloc[:6])
    found = drivers(tally, ["group"], series=series)
    with pytest.raises(CallError, match='Unknown attribute "grp" .did you mean "group"'):
        found.chain({"grp": "a"})
    with pytest.raises(CallError, match='"c" is no value of "group"'):
        found.chain({"group": "c"})
    with pytest.raises(CallError, match='Unknown series "cold"'):
        found.chain(series={"cold": 1.0})
    with pytest.raises(NotIdentified, match="No state has 30 moves"):
        drivers(panel_tally([[0, 1, 4], [0, 1, 1]], STATES, segment=[0, 1]), ["group"])
    with pytest.raises(NotIdentified, match="covariates repeat each other"):
        drivers(tally, series=series.assign(twice=2 * series["heat"]))
