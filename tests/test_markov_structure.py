"""Classes, closed classes and periods, against networkx and small chains read off by eye."""

import math

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.errors import CallError
from cohortflow.markov import analyse, cyclic_groups, determined, surely_reaches
from cohortflow.markov.structure import communicating_classes, is_closed, leads_to, period, reachability, sure
from tests.markov_chains import LIFECYCLE, chains


def graph(P: np.ndarray) -> nx.DiGraph:
    return nx.from_numpy_array((P > 0).astype(int), create_using=nx.DiGraph)


@given(chains())
@settings(deadline=None)
def test_classes_and_reachability_are_those_of_the_graph(P):
    found, g = analyse(P), graph(P)
    assert set(map(frozenset, found.classes)) == set(map(frozenset, nx.strongly_connected_components(g)))
    assert set(map(frozenset, found.closed)) == set(map(frozenset, nx.attracting_components(g)))
    for i in range(len(P)):
        assert set(np.flatnonzero(found.reachable[i])) == nx.descendants(g, i) | {i}
    inside = {s for group in found.closed for s in group}
    assert set(found.transient) == set(range(len(P))) - inside


@given(chains())
@settings(deadline=None)
def test_classes_stand_in_order_of_their_smallest_state(P):
    found = analyse(P)
    assert [group[0] for group in found.classes] == sorted(min(group) for group in found.classes)
    assert all(list(group) == sorted(group) for group in found.classes)


@given(chains())
@settings(deadline=None)
def test_a_class_is_aperiodic_exactly_when_its_graph_is(P):
    found = analyse(P)
    for group, length in zip(found.closed, found.periods, strict=True):
        inside = graph(P).subgraph(group)
        assert (length == 1) == nx.is_aperiodic(inside)
        # every round trip is a multiple of the period: all simple cycles, listed by networkx
        lengths = [len(cycle) for cycle in nx.simple_cycles(inside)]
        assert math.gcd(*lengths) == length


@given(chains())
@settings(deadline=None)
def test_groups_of_a_cycle_follow_one_another(P):
    for group in analyse(P).closed:
        parts = cyclic_groups(P, group)
        assert sorted(s for part in parts for s in part) == list(group)
        assert group[0] in parts[0]
        for here, following in zip(parts, parts[1:] + parts[:1], strict=True):
            assert P[np.ix_(here, following)].sum(axis=1) == pytest.approx(1.0)


@given(chains())
@settings(deadline=None)
def test_certain_arrival_is_what_long_runs_show(P):
    # the chain stopped at state 0, run for very long: mass at 0 tends to 1 exactly where arrival is certain
    stopped = P.copy()
    stopped[0] = np.eye(len(P))[0]
    mass = np.linalg.matrix_power(stopped, 2**14)[:, 0]
    assert surely_reaches(P, [0]).tolist() == (mass > 1 - 1e-6).tolist()


@pytest.mark.parametrize(
    ("P", "verdict"),
    [
        ([[0.5, 0.5], [0.5, 0.5]], "unique_limit"),
        ([[1.0, 0.0], [0.0, 1.0]], "depends_on_start"),
        ([[0.0, 1.0], [1.0, 0.0]], "no_limit"),
        ([[0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]], "no_limit"),
        ([[0.5, 0.5, 0.0], [0.0, 0.0, 1.0], [0.0, 0.5, 0.5]], "unique_limit"),
    ],
)
def test_the_verdict_of_small_chains(P, verdict):
    assert analyse(P).verdict == verdict


def test_the_lifecycle_chain_by_eye():
    # N leads on and is never entered; R, L and D reach each other; C is the exit
    found = analyse(LIFECYCLE)
    assert found.classes == ((0,), (1, 2, 3), (4,))
    assert (found.closed, found.transient, found.absorbing) == (((4,),), (0, 1, 2, 3), (4,))
    assert found.verdict == "unique_limit" and not found.irreducible


def test_a_move_of_any_size_is_a_move():
    assert analyse([[1 - 1e-300, 1e-300], [0.0, 1.0]]).closed == ((1,),)


def test_small_functions_by_eye():
    moves = np.array([[0, 1, 0, 0], [0, 0, 1, 0], [1, 0, 0, 1], [0, 0, 0, 1]])
    assert communicating_classes(moves) == ((0, 1, 2), (3,))
    assert period(moves, (0, 1, 2)) == 3 and period(moves, (3,)) == 1
    assert period(np.array([[0, 1], [0, 1]]), (0,)) == 0  # never returns: no round trip
    assert is_closed(moves, (3,)) and not is_closed(moves, (0, 1, 2))
    assert leads_to(moves, [0], barred=[1]).tolist() == [True, False, True, False]
    assert sure(moves, [3]).tolist() == [True, True, True, True]
    assert reachability(np.array([[0]])).tolist() == [[True]]


@given(chains(), st.integers(0, 5))
@settings(deadline=None)
def test_what_does_not_lead_to_an_unknown_row_is_a_chain_of_its_own(P, place):
    unknown = P.copy()
    unknown[place % len(P)] = np.nan
    known = determined(unknown)
    g = graph(P)
    assert set(known) == set(range(len(P))) - nx.ancestors(g, place % len(P)) - {place % len(P)}
    assert P[np.ix_(known, known)].sum(axis=1) == pytest.approx(np.ones(len(known)))


def test_with_every_row_known_all_is_determined():
    assert determined(LIFECYCLE) == (0, 1, 2, 3, 4)
    with pytest.raises(
        CallError, match=r"P has shape \(2, 2\) and allowed \(3, 3\); both must be the same square"
    ):
        determined(np.eye(2), allowed=np.eye(3))


def test_a_period_belongs_to_one_class():
    with pytest.raises(CallError, match="the states do not all reach each other"):
        period(np.array([[0, 1], [0, 1]]), (1, 0))
