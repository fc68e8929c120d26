"""The chart of past forecasts."""

from dataclasses import replace

import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.backtest import backtest_chart, errors_of
from tests.backtest_cases import past_record


def test_errors_are_mean_distances_by_periods_ahead():
    record = past_record()
    errors = errors_of(record, ["plain", "last_mix"])
    rows = record.frame.query("model == 'plain' and quantity == 'all_live' and horizon == 3")
    by_hand = sum(abs(p - a) for p, a in zip(rows["predicted"], rows["actual"], strict=True)) / len(rows)
    assert errors.loc[3, "plain"] == pytest.approx(by_hand) and list(errors.columns) == ["plain", "last_mix"]


def test_title_and_alternative_say_error_rival_and_coverage():
    figure = backtest_chart(past_record(), "plain", width=60)
    title = figure.texts[0].get_text()
    assert title.startswith("5 months ahead, past forecasts with the model plain missed by")
    assert "the best simple rival (" in title and "of 5 distances" in title
    assert "Bands that held: 1: 89%" in figure.alt


def test_a_rival_far_off_does_not_flatten_the_others():
    said = [t.get_text().replace("\n", " ") for t in backtest_chart(past_record(), "plain").axes[0].texts]
    assert any("off the scale" in text and text.startswith("last year") for text in said)


def test_a_model_that_was_not_tried_is_refused():
    with pytest.raises(CallError, match='has not tried the model "tenure"; it has tried .?plain'):
        backtest_chart(replace(past_record(), models=("plain",)), "tenure")
