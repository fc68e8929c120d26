"""Retention observed against the model."""

import numpy as np
import pandas as pd

from cohortflow.report.chart.retention import departure, immature, retention_chart
from tests import report_fixtures as made


def rows(observed, half, model, at_risk=1000):
    observed = np.asarray(observed, dtype=float)
    return pd.DataFrame({
        "segment": "all", "periods_since_joining": np.arange(len(observed)), "at_risk": at_risk, "observed": observed,
        "observed_low": observed - half, "observed_high": observed + half, "model": model,
    })  # fmt: skip


def title(figure):
    return " ".join(t.get_text() for t in figure.texts)


def test_a_model_within_the_intervals_is_said_to_be_within():
    assert "within the interval" in title(retention_chart(rows([1, 0.9, 0.8], 0.05, [1, 0.91, 0.79])))


def test_a_model_outside_to_the_end_is_said_to_keep_too_many():
    made_up = rows([1, 0.9, 0.7, 0.6], 0.02, [1, 0.91, 0.8, 0.7])
    assert departure(made_up) == 2
    assert "from age 2 on the model lies outside and keeps too many (70.0% at age 3)" in title(
        retention_chart(made_up)
    )


def test_one_stray_age_is_no_departure():
    assert departure(rows([1, 0.9, 0.8, 0.7], 0.02, [1, 0.99, 0.8, 0.7])) is None


def test_a_model_that_crosses_departs_where_it_last_changed_sides():
    # below at 1, above from 2 on
    assert departure(rows([1, 0.9, 0.7, 0.6], 0.02, [1, 0.8, 0.8, 0.7])) == 2


def test_the_models_own_interval_counts_too():
    made_up = rows([1, 0.9, 0.7], 0.02, [1, 0.9, 0.75]).assign(
        model_low=[1, 0.85, 0.69], model_high=[1, 0.95, 0.8]
    )
    assert departure(made_up) is None


def test_immature_ages_are_open_points():
    made_up = rows([1, 0.9, 0.8, 0.7], 0.05, [1, 0.9, 0.8, 0.7]).assign(immature=[False, False, True, True])
    assert immature(made_up).tolist() == [False, False, True, True]
    faces = [
        line.get_markerfacecolor()
        for line in retention_chart(made_up).axes[0].lines
        if line.get_marker() == "o"
    ]
    assert len(set(faces)) == 2


def test_few_customers_are_immature_whatever_the_table_says():
    assert immature(rows([1, 0.9], 0.05, [1, 0.9], at_risk=29).assign(immature=False)).all()


def test_without_observations_the_model_stands_alone():
    bare = rows([np.nan] * 3, 0.0, [1, 0.9, 0.81], at_risk=np.nan)
    assert "The model keeps 81.0% of joiners for 2 months; none observed so long" in title(
        retention_chart(bare)
    )


def test_narrow_and_wide_say_the_same():
    assert retention_chart(made.retention(), width=3.9).alt == retention_chart(made.retention()).alt
