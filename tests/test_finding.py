"""Verdicts."""

import numpy as np
import pytest

from cohortflow.assessment.finding import Finding, verdict


def finding(p, floor=0.005):
    return Finding("order", "previous_state", "second_order", p_value=p, floor=floor)


@pytest.mark.parametrize(
    "p, effect, said",
    [
        (0.2, 1000.0, "holds"),  # nothing surprising, whatever the other model says
        (0.03, 1000.0, "doubtful"),  # borderline
        (0.005, 49.0, "doubtful"),  # clear but below half of 100
        (0.005, 50.0, "fails"),
        (0.005, -50.0, "fails"),  # either direction
        (0.005, np.nan, "doubtful"),  # effect unknown
        (np.nan, np.nan, "not_testable"),
    ],
)
def test_verdicts(p, effect, said):
    assert verdict(finding(p), effect, half_width=100.0) == said


def test_few_replications_can_still_be_clear_at_their_smallest_p_value():
    # 19 random tables: the smallest p-value is 1/20 = .05
    assert verdict(finding(0.05, floor=0.05), 80.0, 100.0) == "fails"


def test_an_unknown_band_never_fails():
    assert verdict(finding(0.005), 80.0, np.nan) == "doubtful"
