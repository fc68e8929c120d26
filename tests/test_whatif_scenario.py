"""Scenarios: what they hold, their windows, and every refusal."""

from types import SimpleNamespace

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.study.parts import ChangeSpec, ScenarioSpec
from cohortflow.whatif.change import Change
from cohortflow.whatif.scenario import Scenario, Window, as_scenario, joiners_under
from tests.projector_cases import MONTHS, SEPTEMBER, STATES

KEEP = Change("steady", "left", add=-0.05)


def test_dates_and_segment_of_the_scenario_hold_for_its_undated_changes():
    own = Change("paused", "steady", add=0.1, starts="2027-01", segment="web")
    plan = Scenario("both", [KEEP, own], starts="2026-11", ends="2027-03", segment="web")
    assert [(c.starts, c.ends, c.segment) for c in plan.changes] == [
        ("2026-11", "2027-03", "web"), ("2027-01", None, "web"),
    ]  # fmt: skip
    assert plan.treated == ("steady", "paused") and plan.segments == ("web",) and not plan.costs
    with pytest.raises(TypeError):
        Scenario("x", per_period={"steady": 1}).per_period["steady"] = 2


def test_as_scenario_takes_changes_scenarios_and_a_studys_tables():
    assert as_scenario(KEEP).changes == (KEEP,) and as_scenario([KEEP, KEEP]).changes == (KEEP, KEEP)
    plan = Scenario("x", KEEP)
    assert as_scenario(plan) is plan
    spec = ScenarioSpec(
        "call", (ChangeSpec("quiet", "weekly", "add", 0.02), ChangeSpec("quiet", "left", "multiply", 0.5, ("paused",))),
        "high", 680, 690, None, 1.2, 3.0, 0.9, {"weekly": 30.0},
    )  # fmt: skip
    plan = as_scenario(spec)
    assert plan.changes[1] == Change("quiet", "left", multiply=0.5, balance="paused", starts=680, ends=690)
    assert (plan.case, plan.cost_per_customer, plan.fixed_cost, plan.joiners_multiply) == (
        "high",
        1.2,
        3.0,
        0.9,
    )
    assert plan.per_period == {"weekly": 30.0} and plan.costs
    with pytest.raises(CallError, match="is a Scenario, a Change or a list of Changes; got str"):
        as_scenario("call the quiet")
    with pytest.raises(CallError, match="changes are Change records; got SimpleNamespace"):
        Scenario("x", [SimpleNamespace()])


def test_windows_count_steps_from_the_base():
    # base end of September 2026: October is step 0
    window = Window.of("2026-11", "2027-01", SEPTEMBER, MONTHS)
    assert [window.holds(h) for h in range(6)] == [False, True, True, True, False, False]
    assert Window.of(SEPTEMBER + 1, None, SEPTEMBER, MONTHS) == Window(0)
    assert Window.of(None, "2026-10", SEPTEMBER, MONTHS) == Window(0, 1)
    assert Window.of(2, 3, None, MONTHS) == Window(1, 3)  # outside any calendar: periods ahead


def test_windows_refuse_the_past_and_the_unclear():
    with pytest.raises(CallError, match="starts is 2026-09, which is not ahead: .* end of 2026-09"):
        Window.of("2026-09", None, SEPTEMBER, MONTHS)
    with pytest.raises(CallError, match=r"ends \(2026-10\) before it starts \(2026-11\)"):
        Window.of("2026-11", "2026-10", SEPTEMBER, MONTHS)
    with pytest.raises(CallError, match="outside any calendar, so it counts periods ahead"):
        Window.of("2026-11", None, None, MONTHS)
    with pytest.raises(CallError, match="starts is 0; this model stands outside"):
        Window.of(0, None, None, MONTHS)


def test_scenarios_refuse_what_makes_no_sense():
    with pytest.raises(CallError, match='case is "middle"; it is one of "low", "high"'):
        Scenario("x", KEEP, case="middle")
    with pytest.raises(CallError, match="joiners_multiply is -1; it is a finite number not below 0"):
        Scenario("x", joiners_multiply=-1)
    with pytest.raises(CallError, match="fixed_cost is nan; it is a finite number"):
        Scenario("x", KEEP, fixed_cost=float("nan"))
    with pytest.raises(CallError, match="has a cost per customer but changes no move"):
        Scenario("x", cost_per_customer=1.0)
    with pytest.raises(CallError, match="joiners_mix holds shares from 0 that add up to 1"):
        Scenario("x", joiners_mix={"fresh": 0.7})
    with pytest.raises(CallError, match='for different segments, "web", "shop"'):
        Scenario("x", [KEEP.within(None, None, "web"), KEEP.within(None, None, "shop")])
    with pytest.raises(CallError, match="joiners_mix names an exit"):
        joiners_under(Scenario("x", joiners_mix={"left": 1.0}), np.ones((1, 5)), STATES, Window())


def test_joiners_number_and_mix():
    joined = np.array([[10.0, 10, 0, 0, 0]] * 3)
    plan = Scenario("x", joiners_multiply=1.5, joiners_mix={"fresh": 0.2, "paused": 0.8})
    found = joiners_under(plan, joined, STATES, Window(1, 2))
    assert found.tolist() == [[10, 10, 0, 0, 0], [6, 0, 24, 0, 0], [10, 10, 0, 0, 0]]
