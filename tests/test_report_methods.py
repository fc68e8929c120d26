"""Assumptions, states, methods."""

from cohortflow.report.methods import assumptions, methods_section, states_table
from tests import report_fixtures as made


def test_the_plain_model_says_what_it_forgets():
    text = " ".join(assumptions(made.facts(made.SMALL)))
    assert "depends on the state now" in text and "2024-11 to 2026-10" in text
    assert "depends on the state now" not in " ".join(assumptions(made.facts(made.SMALL, model="tenure")))


def test_excluded_periods_are_an_assumption():
    assert any("2025-04" in line for line in assumptions(made.facts(made.SMALL, excluded=("2025-04",))))


def test_states_with_roles_and_rules():
    facts = made.facts(made.SMALL, rules={"fresh": "joined in this month"})
    assert states_table(facts).rows[0] == ("fresh", "live, where joiners start", "joined in this month")
    assert len(states_table(made.facts(made.SMALL)).heads) == 2


def test_whatever_is_needed_to_make_it_again_is_printed():
    facts = made.facts(made.SMALL, inputs=(("a.csv", 1234, 56, "ab" * 32),), settings={"study.level": "option"},
                       people={"prepared_by": "A. Nalyst", "checked_by": ""})  # fmt: skip
    terms = {(t, m, f) for t, m, f in methods_section(facts).terms}
    assert ("Input", "a.csv, 1,234 bytes, 56 rows", "SHA-256 " + "ab" * 32) in terms
    assert ("Settings", "study.level = option", "") in terms and (
        "People",
        "prepared by: A. Nalyst",
        "",
    ) in terms
    assert ("Made with", "cohortflow 0.1.0, level 90%, seed 7", "") in terms
