"""Which moves count: window, exclusion, half-life, refusals."""

import numpy as np
import pytest

from cohortflow.errors import CallError, InputError, NotIdentified
from cohortflow.estimator.window import Window, choose_window, plain_rows
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
# three customers, periods 0..3:   fresh steady steady left / fresh steady left - / - fresh steady steady
PANEL = np.array([[0, 1, 1, 2], [0, 1, 2, -1], [-1, 0, 1, 1]])


def test_all_moves_by_hand():
    tally = panel_tally(PANEL, STATES)
    chosen = choose_window(tally)
    assert chosen == Window(0, 2)
    # fresh -> steady: three; steady -> steady: t1 of the first, t2 of the third; steady -> left: two
    assert plain_rows(tally, chosen).N.tolist() == [[0, 3, 0], [0, 2, 2], [0, 0, 0]]


def test_the_window_counts_back_and_an_excluded_period_loses_the_moves_into_it():
    tally = panel_tally(PANEL, STATES)
    assert choose_window(tally, window=2) == Window(1, 2)
    chosen = choose_window(tally, exclude=[2])
    assert chosen.skipped == (1,)
    # without origin 1 (moves into period 2): fresh -> steady of origin 0 twice; origin 2: one left, one stays
    assert plain_rows(tally, chosen).N.tolist() == [[0, 2, 0], [0, 1, 1], [0, 0, 0]]


def test_half_life_weights_by_age():
    tally = panel_tally(PANEL, STATES)
    rows = plain_rows(tally, choose_window(tally, half_life=1))
    # origins 0, 1, 2 weigh 1/4, 1/2, 1: fresh -> steady 2/4 + 1/2; steady stays 1/2 + 1; leaves 1/2 + 1
    assert np.allclose(rows.N, [[0, 1, 0], [0, 1.5, 1.5], [0, 0, 0]])
    # Kish for steady: (1/2 + 1/2 + 1 + 1)^2 / (1/4 + 1/4 + 1 + 1) = 9 / 2.5
    assert rows.effective[1] == pytest.approx(3.6)


def test_refusals():
    tally = panel_tally(PANEL, STATES)
    with pytest.raises(CallError, match="window is a number of periods from 1 on; got 0"):
        choose_window(tally, window=0)
    with pytest.raises(CallError, match="half_life is a positive number of periods; got -1"):
        choose_window(tally, half_life=-1)
    with pytest.raises(NotIdentified, match="no move that is not excluded"):
        choose_window(tally, exclude=[1, 2, 3])
    with pytest.raises(NotIdentified, match="nothing to fit"):
        choose_window(panel_tally([[0, -1, 1]], States(["a", "b"])))
    barred = States(STATES.names, exits=["left"], impossible=[("steady", "steady")])
    with pytest.raises(
        InputError, match=r'2 move\(s\) such as "steady" to "steady", but it is declared impossible'
    ):
        plain_rows(panel_tally(PANEL, barred), Window(0, 2))
    with pytest.raises(InputError, match="exits are absorbing"):
        plain_rows(panel_tally([[0, 2, 1, 1]], STATES), Window(0, 2))
