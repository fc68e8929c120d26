"""Where a move lands that a row has never made: by the structure of bands, ladders, memory and seasons."""

import numpy as np
import pytest

from cohortflow.chain import Component
from cohortflow.errors import NotIdentified
from cohortflow.states import States
from cohortflow.whatif.landing import landing

AB = States(["a", "b", "out"], exits=["out"])


def part(matrices, report, name="all"):
    matrices = np.array(matrices, dtype=float)
    law = np.zeros((max(report) + 1, len(report)))
    for k in range(len(law)):
        law[k, report.index(k)] = 1
    return Component(matrices, report, law, law, name=name)


def rows(found):
    return [int(np.flatnonzero(r)[0]) for r in found]


# periods since joining 0, 1+ of a, b, c: (a0 b0 c0 a1 b1 c1 out); a0 never went to b, c0 did
ABC = States(["a", "b", "out", "c"], exits=["out"])
TENURE = [[
    [0, 0, 0, 0.6, 0, 0.3, 0.1],
    [0, 0, 0, 0.4, 0.5, 0, 0.1],
    [0, 0, 0, 0.2, 0.4, 0.3, 0.1],
    [0, 0, 0, 0.6, 0.3, 0, 0.1],
    [0, 0, 0, 0.5, 0.4, 0, 0.1],
    [0, 0, 0, 0.5, 0.4, 0, 0.1],
    [0, 0, 0, 0, 0, 0, 1],
]]  # fmt: skip
BANDS = [0, 1, 3, 0, 1, 3, 2]


def test_a_band_of_tenure_leads_to_the_next_one():
    assert rows(landing(part(TENURE, BANDS), ABC, np.array([0]), "b")) == [4]  # b in its second period


def test_a_ladder_is_entered_at_its_first_rung():
    # a by periods spent there (a0, a1), b likewise; a0 -> b was never seen, a1 -> b0 was, b stays on to b1
    ladder = [[
        [0, 0.9, 0, 0, 0.1],
        [0, 0.8, 0.1, 0, 0.1],
        [0.2, 0, 0, 0.7, 0.1],
        [0.2, 0, 0, 0.7, 0.1],
        [0, 0, 0, 0, 1],
    ]]  # fmt: skip
    found = landing(part(ladder, [0, 0, 1, 1, 2]), AB, np.array([0]), "b")
    assert rows(found) == [2]
    # and staying goes one rung up, as the other row of the same state does
    stay = np.array(ladder)
    stay[0, 0] = [0, 0, 0.5, 0, 0.5]
    stay[0, 1] = [0, 0.5, 0.4, 0, 0.1]
    assert rows(landing(part(stay, [0, 0, 1, 1, 2]), AB, np.array([0]), "a")) == [1]


def test_memory_of_the_state_before_is_kept():
    # (before, now): (a,a) (b,a) (a,b) (b,b) out; from (b,a) to b never seen, from (a,a) it leads to (a,b)
    memory = [[
        [0.7, 0, 0.2, 0, 0.1],
        [0.9, 0, 0, 0, 0.1],
        [0, 0.3, 0, 0.6, 0.1],
        [0, 0.3, 0, 0.6, 0.1],
        [0, 0, 0, 0, 1],
    ]]  # fmt: skip
    found = landing(part(memory, [0, 0, 1, 1, 2]), AB, np.array([1]), "b")
    assert rows(found) == [2]


def test_another_season_tells():
    quiet, busy = np.array(TENURE[0]), np.array(TENURE[0])
    quiet[2] = [0, 0, 0, 0.6, 0, 0.3, 0.1]
    busy[0] = [0, 0, 0, 0.5, 0.4, 0, 0.1]
    assert rows(landing(part([quiet, busy], BANDS), ABC, np.array([0]), "b")) == [4]


def test_without_a_hint_or_with_two_it_is_not_identified():
    alone = [[[0.9, 0, 0, 0.1], [0, 0.9, 0, 0.1], [0, 0, 0.9, 0.1], [0, 0, 0, 1]]]
    with pytest.raises(
        NotIdentified, match='2 places for "b": its structure gives no hint. Use the plain model'
    ):
        landing(part(alone, [0, 1, 1, 2], "movers"), AB, np.array([0]), "b")
    both = [[
        [0.9, 0, 0, 0, 0.1], [0.5, 0.2, 0.2, 0, 0.1], [0, 0, 0.9, 0, 0.1], [0, 0, 0, 0.9, 0.1], [0, 0, 0, 0, 1]
    ]]  # fmt: skip
    two = part(both, [0, 0, 1, 1, 2])
    assert rows(landing(two, AB, np.array([0]), "out")) == [4]
    split = np.array(both)
    split[0, 1] = [0.5, 0, 0.2, 0.2, 0.1]
    with pytest.raises(NotIdentified, match='row 0 of "all".*its structure allows 2 of them'):
        landing(part(split, [0, 0, 1, 1, 2]), AB, np.array([0]), "b")
