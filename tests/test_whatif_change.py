"""Changes: the row rule by hand, its laws, expanded models, and every refusal."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.chain import Chain, Component, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.states import States
from cohortflow.whatif.change import Change, apply, changed, concerned, feasible
from tests.projector_cases import CHAIN, STATES, P, banded, chains, seasonal, two_types

# rows of CHAIN: fresh 0 .8 0 .15 .05, steady 0 .8 .1 .1 0, paused 0 .5 .4 .05 .05
STEADY, PAUSED = 1, 2


def row(change, state):
    return changed(CHAIN.schedule, change).chain.matrix[state]


def test_add_is_paid_by_the_rest_of_the_row_in_proportion():
    # paused: .5 to steady takes .1; the others hold .4 .05 .05 (sum .5) and give .1 x (.8 .1 .1)
    assert row(Change("paused", "steady", add=0.1), PAUSED) == pytest.approx([0, 0.6, 0.32, 0.04, 0.04])


def test_taking_away_is_given_to_the_rest():
    # steady to left .1 loses .05; .8 and .1 (sum .9) gain .05 x (8/9, 1/9)
    found = row(Change("steady", "left", add=-0.05), STEADY)
    assert found == pytest.approx([0, 0.8 + 0.4 / 9, 0.1 + 0.05 / 9, 0.05, 0])


def test_multiply_and_set_are_the_same_step():
    # .1 x 1.5 = .15 = set .15 = add .05
    expected = row(Change("steady", "left", add=0.05), STEADY)
    assert row(Change("steady", "left", multiply=1.5), STEADY) == pytest.approx(expected)
    assert row(Change("steady", "left", set=0.15), STEADY) == pytest.approx(expected)


def test_a_named_balance_pays_alone():
    # paused: staying .4 pays .1 for steady
    found = row(Change("paused", "steady", add=0.1, balance="paused"), PAUSED)
    assert found == pytest.approx([0, 0.6, 0.3, 0.05, 0.05])
    # two names, left .05 and lapsed .05, pay half each
    found = row(Change("paused", "steady", add=0.04, balance=["left", "lapsed"]), PAUSED)
    assert found == pytest.approx([0, 0.54, 0.4, 0.03, 0.03])


def test_staying_can_be_changed_like_any_move():
    # paused stays .4 -> .5; .5 .05 .05 (sum .6) pay .1 x (5/6, 1/12, 1/12)
    found = row(Change("paused", "paused", add=0.1), PAUSED)
    assert found == pytest.approx([0, 0.5 - 0.5 / 6, 0.5, 0.05 - 0.05 / 6, 0.05 - 0.05 / 6])


def test_all_live_changes_every_live_row_but_not_the_away_ones():
    found = changed(CHAIN.schedule, Change("all_live", "left", multiply=2)).chain.matrix
    assert found[0] == pytest.approx([0, 0.8 * 0.7 / 0.85, 0, 0.3, 0.05 * 0.7 / 0.85])
    assert found[1] == pytest.approx([0, 0.8 * 0.8 / 0.9, 0.1 * 0.8 / 0.9, 0.2, 0])
    assert found[2] == pytest.approx(P[2])


def test_all_live_leaves_out_who_may_not_make_the_move():
    states = States(["a", "b", "out"], exits=["out"], impossible=[("b", "out")])
    chain = Chain(states, [[0.5, 0.4, 0.1], [0.5, 0.5, 0], [0, 0, 1]])
    change = Change("all_live", "out", multiply=2)
    assert change.origins(states) == ("a",)
    assert changed(chain.schedule, change).chain.matrix[1] == pytest.approx([0.5, 0.5, 0])
    # and the move to a live state is not one of staying there
    assert Change("all_live", "b", add=0.1).origins(states) == ("a",)


def test_changes_to_one_row_apply_in_order():
    # first steady .5 -> .6 (others x .8), then left .04 -> 0 (others / .96)
    both = [Change("paused", "steady", add=0.1), Change("paused", "left", multiply=0)]
    found = row(both, PAUSED)
    assert found == pytest.approx(np.array([0, 0.6, 0.32, 0, 0.04]) / 0.96)
    assert not np.allclose(found, row(both[::-1], PAUSED))


@given(
    chain=chains(),
    share=st.floats(-1, 1),
    to=st.integers(0, 3),
    how=st.sampled_from(["add", "set", "multiply"]),
)
def test_a_changed_row_is_a_row_and_the_rest_keeps_its_proportions(chain, share, to, how):
    names, here = chain.states.names, chain.matrix[1, to]
    low, high = feasible(chain.schedule, Change("s1", names[to], add=0.0))
    assert (low, high) == pytest.approx((-here, 1 - here))
    d = share * (high if share > 0 else -low)
    size = {"add": d, "set": here + d, "multiply": 1 + d / here}[how]
    size = min(max(size, 0.0), 1.0) if how == "set" else max(size, 0.0) if how == "multiply" else size
    new = changed(chain.schedule, Change("s1", names[to], **{how: size})).chain.matrix
    assert new[1].sum() == pytest.approx(1, abs=1e-12) and (new[1] >= 0).all()
    assert new[1, to] == pytest.approx(here + d, abs=1e-12)
    others = np.delete(np.arange(4), to)
    assert new[1, others] * (1 - here) == pytest.approx(chain.matrix[1, others] * (1 - here - d), abs=1e-12)
    assert np.array_equal(np.delete(new, 1, axis=0), np.delete(chain.matrix, 1, axis=0))


def test_what_cannot_be_taken_is_refused_with_the_largest_feasible_size():
    with pytest.raises(
        CallError, match=r'"steady" to "left" by add 0\.95 cannot be met.*from -0\.1 to 0\.9\.'
    ):
        changed(CHAIN.schedule, Change("steady", "left", add=0.95))
    with pytest.raises(
        CallError, match=r"by add -0\.2 cannot be met: the move has 0\.1, .*Feasible is from -0\.1"
    ):
        changed(CHAIN.schedule, Change("steady", "left", add=-0.2))
    with pytest.raises(CallError, match=r'its balance \("left", "lapsed"\) 0\.1\. .*factor from 0 to 1\.2\.'):
        changed(CHAIN.schedule, Change("paused", "steady", multiply=1.3, balance=["left", "lapsed"]))
    with pytest.raises(CallError, match=r"by set 0\.7 cannot be met.*Feasible is from 0 to 0\.6\."):
        changed(CHAIN.schedule, Change("paused", "steady", set=0.7, balance=["left", "lapsed"]))
    # exactly the largest is met
    assert row(Change("steady", "left", add=0.9), STEADY) == pytest.approx([0, 0, 0, 1, 0])


def test_draws_that_cannot_take_it_take_what_they_can():
    part = CHAIN.schedule.components[0]
    drawn = np.stack([P, P])
    drawn[1, 1] = [0, 0.88, 0.1, 0.02, 0]
    found, short = apply(drawn, part, STATES, Change("steady", "left", add=-0.05), clip=True)
    assert found[0, 1, 3] == pytest.approx(0.05) and found[1, 1, 3] == 0
    assert found[1, 1].sum() == pytest.approx(1) and short == 0.5


def test_a_row_with_nothing_else_must_name_who_takes():
    states = States(["a", "b", "out"], exits=["out"])
    chain = Chain(states, [[0, 1.0, 0], [0.5, 0.4, 0.1], [0, 0, 1]])
    with pytest.raises(CallError, match='The row of "a" has nothing but "b".*name one move as the balance'):
        changed(chain.schedule, Change("a", "b", add=-0.1))
    found = changed(chain.schedule, Change("a", "b", add=-0.1, balance="out")).chain.matrix
    assert found[0] == pytest.approx([0, 0.9, 0.1])


def test_arguments_are_checked_when_the_change_is_made():
    with pytest.raises(CallError, match="takes exactly one of add, multiply, set; got none"):
        Change("steady", "left")
    with pytest.raises(CallError, match='exactly one of add, multiply, set; got "add", "set"'):
        Change("steady", "left", add=0.1, set=0.2)
    for bad in ({"add": 1.5}, {"set": -0.1}, {"multiply": -1}, {"add": "x"}, {"multiply": float("inf")}):
        with pytest.raises(CallError, match="it is a number"):
            Change("steady", "left", **bad)


def test_states_are_checked_against_the_model():
    schedule = CHAIN.schedule
    with pytest.raises(CallError, match='Unknown state "stedy" .did you mean "steady"'):
        changed(schedule, Change("stedy", "left", add=0.1))
    with pytest.raises(CallError, match='"left" is an exit: nobody moves out of it'):
        changed(schedule, Change("left", "steady", add=0.1))
    with pytest.raises(CallError, match='The balance of "steady" to "left" is "left"'):
        changed(schedule, Change("steady", "left", add=0.1, balance=["left"]))
    states = States(["a", "b", "out"], exits=["out"], impossible=[("b", "out")])
    chain = Chain(states, [[0.5, 0.4, 0.1], [0.5, 0.5, 0], [0, 0, 1]])
    with pytest.raises(CallError, match='"b" to "out" is declared impossible; it cannot be changed'):
        changed(chain.schedule, Change("b", "out", add=0.1))
    with pytest.raises(CallError, match='names "out", but that move is declared impossible'):
        changed(chain.schedule, Change("b", "a", add=0.1, balance="out"))
    barred = States(["a", "b", "out"], exits=["out"], impossible=[("b", "out"), ("a", "out")])
    with pytest.raises(CallError, match='No live state may move to "out"'):
        Change("all_live", "out", add=0.1).origins(barred)


def test_a_row_without_data_cannot_be_changed_and_all_live_passes_it_by():
    rows = P.copy()
    rows[1] = np.nan
    schedule = Chain(STATES, rows).schedule
    with pytest.raises(NotIdentified, match='needs the row of "steady", and no departure from it was seen'):
        changed(schedule, Change("steady", "left", add=0.1))
    found = changed(schedule, Change("all_live", "left", add=0.1)).chain.matrix
    assert np.isnan(found[1]).all() and found[0, 3] == pytest.approx(0.25)


def test_every_matrix_of_a_season_changes():
    other = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])
    found = changed(seasonal([P, other]), Change("steady", "left", add=0.1)).components[0].matrices
    assert found[0, 1] == pytest.approx([0, 0.8 * 8 / 9, 0.1 * 8 / 9, 0.2, 0])
    assert found[1, 1] == pytest.approx([0, 0.5 * 7 / 8, 0.2 * 7 / 8, 0.3, 0.1 * 7 / 8])


def test_every_expanded_row_changes_and_the_mass_keeps_the_rows_own_law():
    schedule, _ = banded()  # new .7 old .3 gone; old .9 old .1 gone
    found = changed(schedule, Change("live", "gone", add=-0.05)).components[0].matrices[0]
    assert found == pytest.approx(np.array([[0, 0.75, 0.25], [0, 0.95, 0.05], [0, 0, 1]]))
    assert feasible(schedule, Change("live", "gone", add=0.0)) == (-0.1, 0.7)
    # a third place of "live" that new customers reach too: .5 and .2 keep their 5 : 2
    wide = Component(
        [[[0, 0.5, 0.2, 0.3], [0, 0.9, 0, 0.1], [0, 0, 0.9, 0.1], [0, 0, 0, 1]]], [0, 0, 0, 1],
        [[1, 0, 0, 0], [0, 0, 0, 1]], [[1, 0, 0, 0], [0, 0, 0, 1]],
    )  # fmt: skip
    states = States(["live", "gone"], exits=["gone"])
    found = changed(Schedule(states, (wide,)), Change("live", "gone", set=0.09)).components[0].matrices[0]
    assert found[0] == pytest.approx([0, 0.91 * 5 / 7, 0.91 * 2 / 7, 0.09])


def test_a_change_for_a_segment_meets_the_part_of_that_name_only():
    schedule, _ = two_types()
    change = Change("here", "gone", multiply=0.5, segment="fragile")
    found = changed(schedule, change)
    assert concerned(schedule, change) == [1]
    assert [c.matrices[0, 0, 1] for c in found.components] == pytest.approx([0.02, 0.1])


def test_a_part_that_never_gets_there_cannot_be_changed():
    states = States(["a", "b", "out"], exits=["out"])
    part = Component([[[0.9, 0.1], [0, 1]]], [0, 2], np.eye(3)[:, [0, 2]] + [[0, 0], [1, 0], [0, 0]],
                     np.eye(3)[:, [0, 2]] + [[0, 0], [1, 0], [0, 0]], name="movers")  # fmt: skip
    with pytest.raises(NotIdentified, match='part "movers" has no place for "b"'):
        changed(Schedule(states, (part,)), Change("a", "b", add=0.1))


def test_resized_and_dated_changes_keep_the_rest():
    change = Change("paused", "steady", add=0.1, balance=["left"], starts="2026-11")
    assert change.resized(2.0, "multiply") == Change(
        "paused", "steady", multiply=2.0, balance=["left"], starts="2026-11"
    )
    assert change.within("2027-01", "2027-02", "web").starts == "2026-11"
    assert change.within("2027-01", "2027-02", "web").segment == "web"
    assert Change("a", "b", add=0.1).within("2027-01", None, None).starts == "2027-01"
