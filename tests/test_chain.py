"""Chain, Schedule and Draws: shapes, maps between declared and expanded states, refusals."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.chain import Chain, Component, Draws, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.states import States

STATES = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"], impossible=[("steady", "fresh")])
P = [[0.0, 0.8, 0.2], [0.0, 0.9, 0.1], [0.0, 0.0, 1.0]]


def two_types() -> Schedule:
    """Half the steady customers never move, the others follow P; joiners are movers."""
    stay = np.eye(3)
    movers = Component([P], [0, 1, 2], np.diag([1.0, 0.5, 1.0]), np.eye(3), name="movers")
    stayers = Component([stay], [0, 1, 2], np.diag([0.0, 0.5, 0.0]), np.zeros((3, 3)), name="stayers")
    return Schedule(STATES, (movers, stayers))


def test_a_chain_is_the_plain_schedule_and_back():
    chain = Chain(STATES, P)
    assert chain.schedule.is_plain and np.array_equal(chain.schedule.chain.matrix, P)
    assert chain.frame.loc["fresh", "steady"] == 0.8
    assert chain.to_frame().iloc[1].tolist() == ["fresh", "steady", 0.8]
    assert Chain(STATES, chain.frame).matrix.tolist() == P


def test_a_row_without_data_stays_missing_and_is_named():
    chain = Chain(STATES, [[np.nan] * 3, P[1], P[2]])
    assert chain.unknown == ("fresh",) and chain.schedule.unknown == ("fresh",)


def test_expanding_and_collapsing_conserve_the_customers():
    schedule = two_types()
    parts = schedule.expand(np.array([10.0, 40.0, 0.0]))
    assert [p.tolist() for p in parts] == [[10, 20, 0], [0, 20, 0]]
    assert schedule.collapse(parts).tolist() == [10, 40, 0]
    assert schedule.expand(np.array([1.0, 2.0, 0.0]), joining=True)[1].tolist() == [0, 0, 0]
    with pytest.raises(NotIdentified, match="not a single chain"):
        schedule.chain.matrix  # noqa: B018


def test_the_tail_holds_the_last_matrix_or_cycles():
    pair = np.stack([np.eye(3), np.array(P)])
    hold = Component(pair, [0, 1, 2], np.eye(3), np.eye(3))
    cycle = Component(pair, [0, 1, 2], np.eye(3), np.eye(3), tail="cycle")
    assert [hold.position(h) for h in range(4)] == [0, 1, 1, 1]
    assert [cycle.position(h) for h in range(4)] == [0, 1, 0, 1]
    assert np.array_equal(cycle.matrix(3), P)


def test_expanded_states_of_one_name_are_numbered():
    expanded = Component([np.eye(4)], [0, 1, 1, 2], np.eye(4)[[0, 1, 3]], np.eye(4)[[0, 1, 3]])
    names = Schedule(STATES, (expanded,)).to_frame()["from"].unique().tolist()
    assert names == ["fresh", "steady #1", "steady #2", "left"] or names == [
        "fresh #1", "steady #1", "steady #2", "left #1",
    ]  # fmt: skip


def test_draws_summarise_to_mean_and_sd():
    chain = Chain(STATES, P)
    drawn = np.stack([np.array(P), np.eye(3)])[:, None]
    draws = Draws.of_matrices(chain.schedule, [drawn])
    frame = draws.to_frame()
    # cell fresh -> steady: draws .8 and 0: mean .4, sd = .8 / sqrt(2)
    assert frame.loc[1, "mean"] == pytest.approx(0.4) and frame.loc[1, "sd"] == pytest.approx(0.8 / 2**0.5)
    assert draws.size == 2 and draws.matrix(0, 5).shape == (2, 3, 3)
    assert "2 draws" in repr(draws)


def test_records_have_safe_displays_and_dictionaries():
    states = States(["<script>", "left"], exits=["left"])
    chain = Chain(states, [[0.5, 0.5], [0, 1]])
    assert "<script>" not in chain._repr_html_() and "&lt;script&gt;" in chain._repr_html_()
    assert chain.to_dict()["kind"] == "chain" and chain.to_dict()["format_version"] == 1
    with pytest.raises(TypeError):
        iter(chain)
    with pytest.raises(ValueError, match="read-only"):
        chain.matrix[0, 0] = 1.0


@pytest.mark.parametrize(
    ("matrix", "text"),
    [
        (np.eye(2), "must be 3 x 3"),
        ([[0.0, 0.8, 0.1], P[1], P[2]], "fresh"),
        ([P[0], P[1], [0.1, 0.0, 0.9]], 'move "left" to "fresh".*an exit is absorbing'),
        ([P[0], [0.1, 0.8, 0.1], P[2]], 'move "steady" to "fresh".*declared impossible'),
    ],
)
def test_wrong_matrices_are_refused(matrix, text):
    with pytest.raises(CallError, match=text):
        Chain(STATES, matrix)


def test_wrong_components_are_refused():
    with pytest.raises(CallError, match="needs matrices"):
        Component(np.eye(3), [0, 1, 2], np.eye(3), np.eye(3))
    with pytest.raises(CallError, match='Unknown tail "stop"'):
        Component([np.eye(3)], [0, 1, 2], np.eye(3), np.eye(3), tail="stop")
    half = Component([np.eye(3)], [0, 1, 2], np.eye(3) / 2, np.eye(3))
    with pytest.raises(CallError, match="start laws must add up to 1"):
        Schedule(STATES, (half,))


def test_a_frame_of_a_two_part_schedule_names_its_parts():
    frame = two_types().to_frame()
    assert isinstance(frame, pd.DataFrame) and set(frame["component"]) == {"movers", "stayers"}
