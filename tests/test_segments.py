"""Segments: customers dealt out at random."""

from dataclasses import replace

import numpy as np
import pytest

from cohortflow.assessment.paths import Paths
from cohortflow.assessment.segments import dealt_out, segments
from cohortflow.assessment.tables import independence
from cohortflow.tally import Tally
from tests.adequacy_cases import tally_of, two_states, world

DRAWN = {"replications": 99}


def test_statistic_by_hand():
    # a: customers 000 and 002 (3 stay, 1 leaves); b: 02. and 02. (2 leave)
    tally = tally_of(["000", "002", "02.", "02."], segment=[0, 0, 1, 1])
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=np.random.default_rng(1))
    assert (found.statistic, found.df) == (pytest.approx(independence([[3, 1], [0, 2]]).lr), 1)
    assert (found.what, found.option, found.repair) == ("group", "group", "segment")


def test_segments_that_leave_faster_are_seen():
    rng = np.random.default_rng(1)
    group = rng.integers(0, 2, 1000)
    tally = two_states(np.where(group, 0.2, 0.1), 1000, 8, rng, segment=group)
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=rng)
    assert found.p_value == 0.01


def test_customers_who_differ_at_random_are_not_segments():
    # the chi-square law would reject: customers' own rates make moves within a customer agree
    rng = np.random.default_rng(3)
    group = rng.integers(0, 2, 300)
    p = rng.choice([0.02, 0.5], 300)
    tally = two_states(p, 300, 12, rng, segment=group)
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=rng)
    assert found.p_value > 0.05


def test_labels_change_hands_only_within_groups():
    rng = np.random.default_rng(1)
    group = rng.integers(0, 5, 200)
    label = rng.integers(0, 3, 200)
    dealt = dealt_out(label, group, rng)
    assert (dealt != label).any()
    for g in range(5):
        assert sorted(dealt[group == g]) == sorted(label[group == g])


def test_no_segments_no_paths_no_moves():
    tally = world("markov", 50)
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=np.random.default_rng(1))
    assert (found.what, found.reason) == ("none", "segment_column")
    tally = world("markov", 50, segments=True)
    (found,) = segments(tally, None, **DRAWN, rng=np.random.default_rng(1))
    assert (found.what, found.reason) == ("group", "customer_rows")
    tally = tally_of(["000", "000"], segment=[0, 1])
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=np.random.default_rng(1))
    assert found.reason == "too_few_moves"


def test_arms_of_experiments_are_left_out():
    tally = world("markov", 50, segments=True)
    tally = Tally(replace(tally.meta, segment_columns=(("group", "arm"),)), tally.tables)
    (found,) = segments(tally, Paths.of(tally), **DRAWN, rng=np.random.default_rng(1))
    assert found.reason == "segment_column"
