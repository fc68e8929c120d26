"""Backtest: the table, no look ahead, coverage and skill in a world that the chain is true of."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.assessment.backtest import COLUMNS, OF_ORIGIN, backtest
from cohortflow.assessment.past import slimmed
from cohortflow.assessment.scores import interval_score
from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit
from cohortflow.states import States
from tests.adequacy_cases import STATES, full_tally, monthly, simulate, tally_of
from tests.bench.adequacy_sizes import P
from tests.bench.worlds import panel_tally


@pytest.fixture(scope="module")
def tally():
    return monthly(1500, periods=30)


@pytest.fixture(scope="module")
def found(tally):
    return backtest(
        tally, models=["plain", "recent"], horizon=3, origins=10, totals={"busy": ["R", "L"]}, draws=200,
        options={"recent": {"window": 8}}, rng=3,
    )  # fmt: skip


def test_the_table_of_the_contract(found, tally):
    frame = found.to_frame()
    assert list(frame.columns) == list(COLUMNS)
    models = ["last_mix", "constant_churn", "last_year", "cohort_curve", "plain", "recent"]
    assert frame["model"].unique().tolist() == models
    assert frame["quantity"].unique().tolist() == ["N", "R", "L", "D", "all_live", "busy", OF_ORIGIN]
    assert len(frame) == 6 * 10 * 3 * 7
    last = tally.calendar.label(tally.meta.last - 3)  # the latest origin whose every horizon has come true
    assert frame["origin"].max() == last


def test_actuals_are_the_tallys(found, tally):
    frame = found.to_frame()
    row = frame[(frame["model"] == "plain") & (frame["quantity"] == "R") & (frame["horizon"] == 2)].iloc[0]
    there = tally.calendar.label(tally.calendar.parse(row["origin"]) + 2)
    assert row["actual"] == tally.mix(there)["R"]
    busy = frame[(frame["model"] == "plain") & (frame["quantity"] == "busy") & (frame["horizon"] == 2)].iloc[
        0
    ]
    assert busy["actual"] == tally.mix(there)[["R", "L"]].sum()


def test_scores_of_a_row_are_those_of_its_figures(found):
    row = found.to_frame().iloc[-1]
    assert row["inside"] == (row["low"] <= row["actual"] <= row["high"])
    assert row["interval_score"] == pytest.approx(
        float(interval_score(row["low"], row["high"], row["actual"], level=0.9))
    )


def test_log_scores_are_those_of_the_moves_held_out(found, tally):
    logs = found.log_scores
    assert logs["origin"].nunique() == 10
    row = logs[logs["model"] == "plain"].iloc[-1]
    origin = tally.calendar.parse(row["origin"])
    moves = tally.one_step[tally.one_step["period"] == origin]
    assert row["moves"] == moves["n"].sum()
    rates = fit(slimmed(tally, segments=False).at_origin(origin)).P
    p = rates[moves["state"], moves["next_state"]]
    assert row["log_score"] == pytest.approx(-(moves["n"] * np.log(p)).sum() / row["moves"], rel=0.02)


def test_nothing_later_than_the_origin_is_used(found, tally):
    # with everything after the origins' actual values cut away, forecasts are the same
    cut = tally.meta.first + 22
    early = tally.at_origin(cut)
    other = backtest(early, models=["plain"], horizon=3, origins=3, draws=200, rng=3)
    same = ["model", "origin", "horizon", "quantity", "predicted"]
    kept = found.to_frame().merge(other.to_frame()[same], on=same[:-1], suffixes=("", "_early"))
    assert set(kept["model"]) >= {"plain", "last_mix", "constant_churn", "cohort_curve"}
    np.testing.assert_allclose(kept["predicted"], kept["predicted_early"], rtol=1e-12, equal_nan=True)


def test_models_at_one_origin_draw_the_same_numbers(tally):
    # "recent" with a window as long as the history is the plain model: same forecasts, same bands
    both = backtest(
        tally, models=["plain", "recent"], horizon=2, origins=2, draws=50, options={"recent": {"window": 999}}
    ).to_frame()
    figures = ["predicted", "low", "high", "crps"]
    plain, recent = (both[both["model"] == m][figures].to_numpy(float) for m in ("plain", "recent"))
    np.testing.assert_array_equal(plain, recent)


def test_the_same_seed_gives_the_same_table(tally):
    one, two = (backtest(tally, horizon=2, origins=2, draws=50, rng=5).to_frame() for _ in range(2))
    pd.testing.assert_frame_equal(one, two)


def test_the_chain_covers_and_beats_carrying_forward_where_it_is_true():
    # a base that runs down, 30 periods, 3,000 customers: what the chain says is true, no joiners
    rng = np.random.default_rng(2)
    law = P.copy()
    law[1:4] = 0.6 * P[1:4] + 0.4 * np.eye(5)[1:4]  # slower, so that enough are left
    grid = simulate(law, np.zeros(3000, dtype=int), 31, rng)
    tally = full_tally(grid, STATES, buckets=128, first=600, calendar="month")
    found = backtest(tally, horizon=3, origins=12, joiners="none", draws=300)
    scores = found.scores.set_index(["model", "quantity", "horizon"]).sort_index()
    mine = scores.loc[("plain", "all_live")]
    assert (mine["skill"] > 0.5).all()
    assert mine["coverage"].mean() >= 0.75  # nominal .9, 12 overlapping origins
    assert found.validated_to("plain") == (3, "")
    alone = scores.loc[("plain", OF_ORIGIN)]
    np.testing.assert_allclose(alone["mean_error"], mine["mean_error"])  # nobody joins: one base


def test_a_model_that_cannot_be_fitted_is_noted_and_left_out():
    tally = monthly(300, periods=20)
    bare = tally.__class__.build(
        tally.meta.__class__(**{**vars(tally.meta), "tables": ("moves",)}), {"moves": tally.tables["moves"]}
    )
    found = backtest(bare, models=["plain", "second_order"], horizon=2, origins=3, draws=50)
    notes = found.notes
    assert notes["note"].iloc[0] == "joiners_unknown"
    assert notes[notes["model"] == "second_order"]["note"].tolist() == ["not_identified"] * 3
    assert "second_order" not in set(found.to_frame()["model"])
    closed = found.to_frame()[found.to_frame()["quantity"] == OF_ORIGIN]
    assert closed["actual"].isna().all()  # bare counts do not follow customers


def test_planned_joiners_are_replaced(tally):
    assert backtest(tally, horizon=1, origins=1, draws=20, joiners="planned").joiners == "last_year"


def test_short_histories_have_fewer_origins_or_none():
    tally = tally_of(["0" * 8 + "2", "0" * 9, "0" * 7 + "12", "1" * 9] * 5)
    found = backtest(tally, horizon=2, origins=12, draws=20)
    assert len(found.origins) == 4  # periods 3 .. 6 of 0 .. 8
    assert found.validated_to("plain") == (0, "too_few_origins")
    with pytest.raises(NotIdentified, match="needs at least 13 periods of history; there are 9"):
        backtest(tally, horizon=9)


@pytest.mark.parametrize(
    "wrong, text",
    [
        ({"models": "plain"}, "models takes a list of names"),
        ({"models": ["plian"]}, 'Unknown model "plian" .did you mean "plain"'),
        ({"horizon": 0}, "horizon and origins are at least 1"),
        ({"draws": 1}, "draws at least 2"),
    ],
)
def test_refuses(tally, wrong, text):
    with pytest.raises(CallError, match=text):
        backtest(tally, **wrong)


def test_asking_for_a_model_that_was_not_tried(found):
    with pytest.raises(CallError, match='no model "plane" .did you mean "plain"'):
        found.validated_to("plane")


def test_headline_and_settings(found):
    assert found.headline() == "backtest of plain, recent: 10 origins x 3 periods, 90% bands"
    about = found.about()
    assert (about["draws"], about["origins"], about["joiners"]) == (200, 10, "last_year")


def test_a_model_by_segment_finds_its_segments():
    rng = np.random.default_rng(3)
    group = rng.integers(0, 2, 400)
    law = np.array([[[0.9, 0.1], [0, 1]], [[0.98, 0.02], [0, 1]]])[group]
    grid = simulate(law, np.zeros(400, dtype=int), 16, rng)
    tally = panel_tally(grid, States(["here", "gone"], exits=["gone"]), segment=group)
    found = backtest(
        tally,
        models=["plain", "segment"],
        horizon=2,
        origins=3,
        draws=50,
        options={"segment": {"by": "group"}},
    )
    assert found.notes.empty
    assert {"plain", "segment"} <= set(found.to_frame()["model"])
