"""Tested assumptions, past forecasts and the chosen model in words."""

import pandas as pd
import pytest

from cohortflow.assessment import choose
from cohortflow.report.trust import (
    adequacy_sentence,
    adequacy_table,
    assumption,
    choice_sentence,
    scores_table,
    validated_sentence,
)
from tests import report_fixtures as made
from tests.backtest_cases import past_record


class Told:
    """A backtest with a given verdict."""

    level = 0.9

    def __init__(self, reached, reason):
        self.reached, self.reason = reached, reason
        columns = {"model": "plain", "quantity": "all_live", "horizon": [1, 2, 3], "origins": 12, "coverage": 0.75}
        self.scores = pd.DataFrame(columns)

    def validated_to(self, model, quantity):
        return self.reached, self.reason


@pytest.mark.parametrize(
    "reached, reason, words",
    [
        (0, "coverage", "Validated to no distance: past forecasts of live customers do not vouch for this one; its "
                        "bands held too often or too seldom (9 of 12, meant: 90%)."),
        (0, "too_few_origins", "there are fewer than 8 past origins."),
        (1, "not_better_than_last_mix", "Validated to 1 month: so far ahead"),
        (2, "coverage", "Beyond, its bands held too often or too seldom (9 of 12, meant: 90%)."),
        (3, "", "Validated to 3 months"),
    ],
)  # fmt: skip
def test_how_far_the_past_vouches(reached, reason, words):
    text = validated_sentence(Told(reached, reason), "plain", kind="month")
    assert words in text and text.endswith(".")
    assert ("as far as it was tried" in text) == (reason == "")


def test_one_choice_is_told_with_its_lead():
    record = past_record()
    choice = choose(record, rng=1)
    text = choice_sentence(choice)
    assert text.startswith(f'The model "{choice.model}" was chosen by backtest') and choice.runner_up in text
    assert "of resampled pasts" in text


def test_adequacy_in_a_sentence_and_a_table():
    frame = made.adequacy()
    assert adequacy_sentence(frame) == (
        "Of 3 assumptions that can be tested 1 holds, 1 is doubtful and 1 fails: no drift (early, late)."
    )
    rows = adequacy_table(frame).rows
    assert rows[1] == ("no drift (early, late)", "fails", "below 0.001", "+310", "model recent")
    assert rows[3][1:] == ("cannot be tested", "", "", "needs customers' rows, not bare counts")


def test_a_column_named_by_the_user_is_printed_short():
    assert len(assumption({"check": "segments", "what": "x" * 300})) < 70


def test_scores_of_the_named_models_and_all_rivals():
    rows = scores_table(past_record(), models=("recent",)).rows
    names = {row[0] for row in rows}
    assert "model recent" in names and "model plain" not in names and "last mix" in names
    assert {row[1] for row in rows} == {"1", "3", "5"}
