"""The record of adequacy: its table, what it can and cannot test, sizes and powers in a small simulation."""

import numpy as np
import pytest

import cohortflow as cf
from cohortflow.assessment.adequacy import COLUMNS, adequacy
from cohortflow.errors import CallError
from tests.adequacy_cases import STATES, monthly, tally_of, two_states, world
from tests.bench.adequacy_sizes import study

CHECKS = ["order", "drift", "drift", "seasons", "segments", "tenure", "time_in_state", "customers"]


def test_the_table_of_the_contract():
    found = adequacy(monthly(500), horizon=4, replications=39, rng=2)
    frame = found.to_frame()
    assert list(frame.columns) == list(COLUMNS)
    assert frame["check"].tolist()[:8] == CHECKS
    assert set(frame["verdict"]) <= {"holds", "doubtful", "fails", "not_testable"}
    assert (frame["advice"][frame["verdict"] == "holds"] == "").all()
    assert (frame["advice"][frame["verdict"] != "holds"] != "").all()
    assert frame["p_value"].dropna().between(0, 1).all()
    assert found.outlook["half_width"][0] > 0
    assert "500 customers, 4 periods ahead" in found.headline()
    assert found.to_dict()["about"]["replications"] == 39


def test_the_same_seed_gives_the_same_table():
    tally = world("markov", 200)
    one, two = (adequacy(tally, horizon=3, replications=39, rng=7).to_frame() for _ in range(2))
    assert one.equals(two)


def test_a_failure_that_matters_fails_and_names_its_remedy():
    # the chance to leave is four times as high in the last eight periods: recent rates tell another story
    tally = two_states([0.02] * 22 + [0.08] * 8, 4000, 31, np.random.default_rng(5))
    frame = adequacy(tally, horizon=6, replications=99, rng=1, options={"recent": {"window": 8}}).to_frame()
    eras = frame[frame["what"] == "eras"].iloc[0]
    assert (eras["verdict"], eras["advice"]) == ("fails", "recent")
    assert eras["effect"] < 0  # fewer are left


def test_bare_counts_say_what_is_lacking():
    moves = [(t, "R", to, n) for t in range(12) for to, n in (("R", 90), ("L", 6), ("C", 4))]
    moves += [(t, "L", "L", 10) for t in range(12)]
    frame = adequacy(cf.read_counts(moves, STATES, period="step"), horizon=3, replications=39).to_frame()
    said = dict(zip(frame["check"], frame["advice"], strict=True))
    assert said["order"] == said["tenure"] == said["customers"] == said["k_steps"] == "customer_rows"
    assert said["seasons"] == "no_calendar"
    assert frame.loc[frame["check"] == "drift", "verdict"].tolist() == ["holds", "holds"]


def test_without_effects_nothing_fails():
    frame = adequacy(world("own rows", 600), horizon=3, replications=39, effects=False).to_frame()
    assert frame["effect"].isna().all()
    assert frame.set_index("check")["verdict"]["customers"] == "doubtful"


def test_by_segment():
    found = adequacy(
        world("markov", 300, segments=True), horizon=3, replications=19, by="group", effects=False
    )
    assert found.to_frame()["segment"].unique().tolist() == ["all", "a", "b"]
    assert found.gaps["segment"].unique().tolist() == ["all", "a", "b"]
    inner = found.to_frame()[found.to_frame()["segment"] == "a"].set_index("check")
    assert inner["advice"]["segments"] == "too_few_moves"  # one value is left in a segment


@pytest.mark.parametrize(
    "wrong, text",
    [
        ({"replications": 10}, "replications is at least 19"),
        ({"horizon": 0}, "horizon is a number of periods"),
    ],
)
def test_refuses(wrong, text):
    with pytest.raises(CallError, match=text):
        adequacy(tally_of(["000", "012"]), **wrong)


def test_sizes_and_powers_in_a_small_simulation():
    # 40 seeded worlds of 250 customers; at a true size of .05, P(more than 8 of 40) is .0001 (binomial)
    jobs = [("markov", 250, s, 39, "step") for s in range(40)]
    jobs += [("own rows", 250, s, 39, "step") for s in range(10)]
    shares = study(jobs, workers=1)
    markov = shares.loc[("markov", "step", 250)].dropna()
    assert len(markov) == 9
    assert markov.max() <= 8 / 40
    assert 0.01 <= markov.mean() <= 0.09  # never zero all over
    own = shares.loc[("own rows", "step", 250)]
    assert own["customers rates_differ"] > 0.9
    assert own["order previous_state"] > 0.1
