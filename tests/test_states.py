"""States: roles, masks and what is refused."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.states import States


def box() -> States:
    return States(["fresh", "steady", "paused", "left"], exits=["left"], entries=["fresh"], away=["paused"],
                  impossible=[("steady", "fresh")])


def test_roles_and_masks_follow_the_declared_order():
    states = box()
    assert [states.role(n) for n in states.names] == ["entry", "live", "away", "exit"]
    assert states.live == ("fresh", "steady") and states.remaining == ("fresh", "steady", "paused")
    assert states.live_mask.tolist() == [True, True, False, False]
    assert states.exit_mask.tolist() == [False, False, False, True]


def test_allowed_moves_leave_out_the_impossible_and_every_way_out_of_an_exit():
    # four states: 16 pairs, minus steady -> fresh, minus the three moves out of "left"
    assert box().allowed.sum() == 12
    assert not box().allowed[1, 0] and np.array_equal(box().allowed[3], [False, False, False, True])


@pytest.mark.parametrize(
    ("kwargs", "text"),
    [
        ({"names": []}, "at least one state name"),
        ({"names": ["a", "a"]}, '"a" came more than once'),
        ({"names": ["a", " "]}, "non-empty text"),
        ({"names": "abc"}, "takes a list of names"),
        ({"names": ["all_live"]}, "reserved"),
        ({"names": ["paused", "left"], "exits": ["lift"]}, 'Unknown state "lift" .did you mean "left"'),
        ({"names": ["a", "b"], "exits": ["b"], "away": ["b"]}, "one role"),
        ({"names": ["a", "b"], "exits": ["b"], "impossible": [("b", "b")]}, "cannot be declared impossible"),
    ],
)
def test_wrong_states_are_refused_with_the_reason(kwargs, text):
    names = kwargs.pop("names")
    with pytest.raises(CallError, match=text):
        States(names, **kwargs)
