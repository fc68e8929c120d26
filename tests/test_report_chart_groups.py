"""Closed groups."""

import pytest

import cohortflow as cf
from cohortflow.errors import CallError
from cohortflow.report.chart.groups import groups_chart, groups_of

STATES = cf.States(["trial", "club", "flex", "sleep", "gone"], exits=["gone"])
P = [[0.5, 0.3, 0.1, 0.05, 0.05], [0, 1, 0, 0, 0], [0, 0, 0.8, 0.2, 0], [0, 0, 0.5, 0.5, 0], [0, 0, 0, 0, 1]]


def test_groups_with_the_share_that_ends_in_each():
    # By hand: from trial .3/.5 = .6 end in club, .15/.5 = .3 in flex and sleep, .05/.5 = .1 gone. Ten start in trial
    # and five in club: club (6 + 5)/15, flex and sleep 3/15, gone 1/15. Inside flex and sleep: .5/.7 and .2/.7.
    found = groups_of(cf.long_run(cf.Chain(STATES, P), start={"trial": 10, "club": 5}))
    assert [g.name for g in found] == ["club", "flex and sleep", "gone"]
    assert [g.ends for g in found] == pytest.approx([11 / 15, 3 / 15, 1 / 15])
    assert [s for _, s in found[1].members] == pytest.approx([5 / 7, 2 / 7])
    assert [g.exit for g in found] == [False, False, True]


def test_title_and_alternative():
    figure = groups_chart(cf.long_run(cf.Chain(STATES, P), start={"trial": 10, "club": 5}))
    assert "2 groups of states that nobody leaves: 73.3% of today's customers end in club" in figure.alt
    assert "flex and sleep 20.0% (inside it flex 71.4%, sleep 28.6%)" in figure.alt


def test_a_periodic_group_says_how_often_it_repeats():
    chain = cf.Chain(cf.States(["a", "b", "c"]), [[0, 1, 0], [1, 0, 0], [0, 0, 1]])
    figure = groups_chart(cf.long_run(chain, start={"a": 1, "c": 1}))
    assert "it repeats every 2 periods" in figure.alt


def test_one_group_is_not_drawn():
    chain = cf.Chain(cf.States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]])
    with pytest.raises(CallError, match="needs at least two; this long run has 1"):
        groups_chart(cf.long_run(chain, start={"a": 1}))
