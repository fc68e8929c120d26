"""Words for codes: every code that the program gives has some."""

import re
from pathlib import Path

import pytest

from cohortflow.history import Finding
from cohortflow.report import wording

PACKAGE = Path(wording.__file__).parents[1]


def source(part: str) -> str:
    return "\n".join(p.read_text(encoding="utf-8") for p in sorted((PACKAGE / part).rglob("*.py")))


def test_every_reason_of_the_accounting_has_words():
    from cohortflow.history.columns import FAULTS
    from cohortflow.history.reading import SET_ASIDE

    reasons = {reason for _, reason in FAULTS.values()} | set(SET_ASIDE.values())
    assert reasons <= set(wording.REASONS)


def test_every_finding_of_the_check_has_words():
    codes = set(re.findall(r'\.found\(\s*"([a-z_]+)"', source("history")))
    assert len(codes) > 4 and codes <= set(wording.NOTES)


def test_every_note_of_the_estimator_and_the_projector_has_words():
    codes = set(re.findall(r'f"([a-z_]+):\{', source("estimator") + source("projector")))
    structure = {"closed_group", "periodic_group", "component", "step", "position"}  # not findings
    structure |= {"too_few", "at_zero", "no_exposure"}  # of library results that no report shows
    assert {"no_data", "few_at_risk"} <= codes and codes - structure <= set(wording.NOTES)


def test_every_verdict_has_words():
    codes = set(re.findall(r'return "([a-z_]+)"', source("projector")))
    assert {"exits_only", "no_limit"} <= set(wording.VERDICTS)
    assert codes & {"unique_limit", "unique_cycle", "depends_on_start", "no_limit", "exits_only"} <= set(
        wording.VERDICTS
    )


def test_every_model_and_joiner_method_has_words():
    from cohortflow.study.parts import JOINER_METHODS, MODELS

    assert set(MODELS) <= set(wording.MODELS) and set(JOINER_METHODS) <= set(wording.JOINERS)


def test_unknown_codes_are_said_as_they_are():
    assert wording.verdict("some_new_code") == ("Some new code.", "")
    assert wording.note("brand_new:weekly") == "Brand new: weekly."


def test_findings_of_the_check_say_their_size():
    assert (
        wording.note(Finding("superseded_rows", rows=1234))
        == "1,234 rows were replaced by later versions of themselves."
    )
    assert wording.note(Finding("odd_thing", rows=3, customers=2)) == "Odd thing (3 rows, 2 customers)."


def test_findings_name_state_and_segment():
    found = Finding("few_at_risk", detail={"state": "quiet", "segment": "web"})
    assert wording.note(found).startswith("web: Fewer than 30 departures from quiet")


def test_a_state_called_like_a_placeholder_is_printed_as_it_is():
    assert "departures from {rows} were" in wording.note("few_at_risk:{rows}")


@pytest.mark.parametrize("kind, text", [("month", "a month"), ("own", "a period"), ("step", "a step")])
def test_a_period(kind, text):
    assert wording.a_period(kind) == text


def test_cautions_say_what_the_trade_expects():
    text = " ".join(wording.CAUTIONS)
    for word in ("not a promise", "accounting", "qualified", "personal data"):
        assert word in text
