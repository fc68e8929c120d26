"""Memory: size under one chain, power with memory, calm under shared shocks; criteria of order."""

import numpy as np
import pytest
from scipy.special import gammaln
from scipy.stats import multinomial

from cohortflow.assessment.order import order, order_criteria
from cohortflow.assessment.tables import independence
from cohortflow.errors import CallError
from tests.adequacy_cases import tally_of, world


def p_of(name, **more):
    return order(world(name, **more), replications=99, rng=np.random.default_rng(3)).p_value


def test_statistic_is_that_of_the_contexts():
    # three histories: 0 0 1, 1 0 0, 0 0 0 0: contexts in state 0: (0 -> 0, 0 -> 1), (1: 0 -> 0), and (0: 0 -> 0)
    # from 000
    found = order(tally_of(["001", "100", "000"]), replications=19, rng=np.random.default_rng(1))
    table = [
        [1, 1],
        [1, 0],
    ]  # previous 0: next 0 once (000), next 1 once (001); previous 1: next 0 once (100)
    assert found.statistic == pytest.approx(independence(table).lr)
    assert found.df == 1


def test_remembers_when_there_is_memory_and_not_when_there_is_none():
    assert p_of("second order", customers=1500) == 0.01  # 1 / (99 + 1): no random table came near
    assert p_of("markov", customers=1500) > 0.05


def test_months_that_differ_for_everybody_are_not_memory():
    assert p_of("shocks", customers=1500, periods=25) > 0.05


def test_without_contexts_it_says_what_is_lacking():
    tally = tally_of(["001"], full=False)
    found = order(tally, replications=19, rng=np.random.default_rng(1))
    assert (found.reason, np.isnan(found.p_value)) == ("customer_rows", True)


def test_histories_of_two_periods_cannot_tell():
    found = order(tally_of(["01", "00"]), replications=19, rng=np.random.default_rng(1))
    assert found.reason == "too_few_moves"


def test_criteria_by_hand():
    # 0 1 0 0 1: moves 01 10 00 01; order 0 of the four targets 1 0 0 1: 4 log 1/2; order 1: 0 -> 1 twice,
    # 0 -> 0 once: 2 log 2/3 + log 1/3
    found = order_criteria([0, 1, 0, 0, 1], most=1)
    assert found["log_likelihood"].tolist() == pytest.approx(
        [4 * np.log(0.5), 2 * np.log(2 / 3) + np.log(1 / 3)]
    )
    assert found["parameters"].tolist() == [1, 2]
    assert found["aic"][0] == pytest.approx(-8 * np.log(0.5) + 2)
    assert found["bic"][1] == pytest.approx(-2 * found["log_likelihood"][1] + 2 * np.log(4))


def test_order_zero_is_the_multinomial_likelihood():
    sequence = np.random.default_rng(1).integers(0, 3, 400)
    level = order_criteria(sequence, most=0)["log_likelihood"][0]
    counts = np.bincount(sequence, minlength=3)
    ways = multinomial.logpmf(counts, 400, counts / 400) - level
    assert ways == pytest.approx(gammaln(401) - gammaln(counts + 1).sum())  # the number of orderings


def test_several_sequences_are_not_joined_at_their_ends():
    assert order_criteria([[0, 0], [1, 1]], most=1)["moves"].tolist() == [2, 2]


def test_criteria_refuse_sequences_that_are_too_short():
    with pytest.raises(CallError, match="Order 2 needs a sequence of at least 3 states"):
        order_criteria([[0, 1], [1]], most=2)
