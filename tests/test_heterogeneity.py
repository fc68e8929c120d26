"""Customers who differ: the closed form against sums over pairs, its size and power."""

from dataclasses import replace

import numpy as np
import pytest

from cohortflow.assessment.heterogeneity import customers, heterogeneity_z
from cohortflow.assessment.paths import Paths
from cohortflow.tally import Tally
from tests.adequacy_cases import tally_of, world


def z_by_pairs(who, origin, target, size):
    """The same from its definition: cross-products of single moves' scores within customers, in loops."""
    counts = np.zeros((size, size))
    np.add.at(counts, (origin, target), 1)
    n = counts.sum(axis=1)
    p = counts / np.where(n > 0, n, 1)[:, None]
    total = spread = 0.0
    for c in set(who):
        mine = [(i, j) for w, i, j in zip(who, origin, target, strict=True) if w == c]
        x = 0.0
        for a, (i, j) in enumerate(mine):
            for b, (k, m) in enumerate(mine):
                if a != b and i == k:
                    cells = [v for v in range(size) if p[i, v] > 0]
                    x += sum(((j == v) - p[i, v]) * ((m == v) - p[i, v]) / p[i, v] for v in cells)
        total, spread = total + x, spread + x**2
    for i in range(size):
        q = (counts[i] > 0).sum()
        visits = [sum(1 for w, o in zip(who, origin, strict=True) if w == c and o == i) for c in set(who)]
        if n[i]:
            total += (q - 1) * sum(v**2 for v in visits) / n[i]
    return total / spread**0.5


def test_closed_form_equals_the_sum_over_pairs():
    rng = np.random.default_rng(7)
    who, origin, target = rng.integers(0, 12, 90), rng.integers(0, 3, 90), rng.integers(0, 3, 90)
    found = heterogeneity_z(who, origin, target, np.ones(90, dtype=int), 3)
    assert found == pytest.approx(z_by_pairs(who, origin, target, 3), rel=1e-10)


def test_repeated_entries_add_up():
    one = heterogeneity_z(np.array([0, 0, 1]), np.zeros(3, int), np.array([0, 0, 1]), np.array([1, 1, 3]), 2)
    two = heterogeneity_z(np.array([0, 1]), np.zeros(2, int), np.array([0, 1]), np.array([2, 3]), 2)
    assert one == two


def test_nobody_moved_twice():
    assert np.isnan(heterogeneity_z(np.array([0, 1]), np.array([0, 0]), np.array([0, 1]), np.ones(2, int), 2))
    found = customers(tally_of(["00", "02"]), None)
    assert found.reason == "too_few_moves"


def test_sees_customers_who_differ_and_is_calm_otherwise():
    assert customers(world("own rows", 800), None).p_value < 1e-6
    assert customers(world("markov", 800), None).p_value > 0.05
    assert customers(world("shocks", 800), None).p_value > 0.05  # months that differ are another matter


def test_paths_and_single_customer_buckets_agree():
    tally = world("two types", 300)
    coarse = Tally(replace(tally.meta, bucket_bits=7), tally.tables)
    direct = customers(tally, None)
    assert customers(coarse, Paths.of(tally)).statistic == pytest.approx(direct.statistic, rel=1e-12)
    assert customers(coarse, None).reason == "customer_rows"
