"""What a study asks about scenarios and levers, as library calls."""

from dataclasses import replace
from types import SimpleNamespace

import pytest

import cohortflow as cf
from cohortflow.errors import CallError, StudyError
from cohortflow.runs.plans import (
    parse_lever,
    parse_target,
    plan_tables,
    plans_study,
    required_study,
    segment_tally,
    targets,
)
from cohortflow.runs.steps import fit_study, forecast_study
from cohortflow.study import read_study

STUDY = """
[study]
title = "small"
period = "step"
horizon = 3
[input]
layout = "history"
files = ["panel.csv"]
customer = "id"
time = "t"
state = "state"
segments = ["shop"]
[[state]]
name = "left"
role = "exit"
[[state]]
name = "here"
[[state]]
name = "busy"
[value]
currency = "GBP"
per_period = { busy = 10.0 }
[[scenario]]
name = "more"
change = [{ from = "here", to = "busy", add = 0.1 }]
cost_per_customer = 0.5
[[scenario]]
name = "in a"
segment = "a"
change = [{ from = "here", to = "busy", add = 0.1 }]
"""


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    import numpy as np

    folder = tmp_path_factory.mktemp("small")
    rng, rows = np.random.default_rng(4), ["id,t,state,shop"]
    for n in range(120):
        state, shop = "here", "ab"[n % 2]
        for t in range(1, 10):
            rows.append(f"c{n},{t},{state},{shop}")
            if state == "left":
                break
            state = rng.choice(
                ["left", "here", "busy"], p=[0.1, 0.4, 0.5] if state == "here" else [0.05, 0.25, 0.7]
            )
    (folder / "panel.csv").write_text("\n".join(rows))
    (folder / "study.toml").write_text(STUDY)
    study = read_study(folder / "study.toml")
    tally = cf.count(cf.read(study))
    return study, next(forecast_study(study, fit_study(study, tally)))


def test_scenarios_and_levers_are_the_library_calls(made):
    study, forecast = made
    plans = plans_study(study, forecast)
    assert [s.scenario.name for s in plans.scenarios] == ["more", "in a"]
    assert [s.segment for s in plans.scenarios] == ["all", "a"]
    alone = cf.what_if(
        forecast.fit, study.scenarios[0], periods=3, joiners=forecast.joiners, value=forecast.value, level=study.level,
        draws=forecast.fit.draws(2000, rng=study.seed), rng=study.seed, totals=study.totals,
    )  # fmt: skip
    assert plans.scenarios[0].to_frame().equals(alone.to_frame())
    own = fit_study(study, segment_tally(study, forecast.fit.tally, "a"))
    assert plans.scenarios[1].schedule.chain.matrix == pytest.approx(own.P)
    assert [r.target.code for r in plans.levers] == [
        {"value:total": "value:total", "base": "base:all_live"}.get(t, t) for t in targets(study, forecast)
    ][: len(plans.levers)]
    tables = plan_tables([plans])
    assert set(tables) == {"scenarios", "levers"} and set(tables["scenarios"]["segment"]) == {"all", "a"}


def test_the_change_needed_for_named_and_for_the_first_levers(made):
    study, forecast = made
    (one,) = required_study(study, forecast, "base:busy", 45.0, [("here", "busy")])
    assert one.target == "base:busy" and one.reach == 45.0
    assert len(required_study(study, forecast, "base", 60.0)) == 5
    (net,) = required_study(study, forecast, "net", None, [("here", "busy")])
    assert net.reach == 0.0


def test_a_scenario_that_cannot_be_met_names_itself(made):
    study, forecast = made
    big = replace(study.scenarios[0], change=(replace(study.scenarios[0].change[0], size=0.99),))
    with pytest.raises(
        StudyError, match=r'\[\[scenario\]\] "more": The change of "here" to "busy" by add 0.99'
    ):
        plans_study(replace(study, scenarios=(big,)), forecast)
    lost = SimpleNamespace(title="small")
    with pytest.raises(StudyError, match='segment = "z" is no value of the segment columns "shop"'):
        segment_tally(lost, forecast.fit.tally, "z")


def test_texts_of_targets_and_levers():
    assert parse_target("base:weekly=5_500") == ("base:weekly", 5500.0)
    with pytest.raises(CallError, match='has the mark "many"; it is a number'):
        parse_target("base=many")
    with pytest.raises(CallError, match='--lever "quiet" names a move as FROM:TO'):
        parse_lever("quiet")
