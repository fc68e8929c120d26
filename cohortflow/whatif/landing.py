"""Where a move lands that a row of an expanded model has never made: told by the model's structure, or not at
all.

In a model with several places for a state (bands of tenure, ladders, memory of the state before) a move to
state j from row i leads to one certain place. If the row has moves to j, that place is known. If not:

    one place for j            it is that place
    another matrix (a season)  the places where the same row's moves to j lead there
    siblings                   rows that share a destination with row i, other than an exit, are like it in
                               whatever the model remembers; where their moves to j all lead to one place, so
                               does this one
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component
from cohortflow.errors import NotIdentified
from cohortflow.states import States

Array = NDArray[np.float64]


def landing(component: Component, states: States, rows: NDArray[np.int64], to: str) -> Array:
    """(r, m) law over the places of `to` for each row of the expanded states.

    Raises NotIdentified when the structure of the model does not tell.

    >>> states = States(["live", "gone"], exits=["gone"])
    >>> matrix = [[[0, 0.7, 0.3], [0, 0.9, 0.1], [0, 0, 1.0]]]
    >>> law = [[0.25, 0.75, 0], [0, 0, 1.0]]
    >>> landing(Component(matrix, [0, 0, 1], law, law), states, np.array([1]), "gone")
    array([[0., 0., 1.]])
    """
    onto = component.report == states.index(to)
    moves = np.nan_to_num(component.matrices).sum(axis=0)
    return np.stack([_law(moves, component, states, int(row), onto, to) for row in rows])


def _law(
    moves: Array, component: Component, states: States, row: int, onto: NDArray[np.bool_], to: str
) -> Array:
    if onto.sum() == 1:
        return onto.astype(float)
    own = np.where(onto, moves[row], 0.0)
    if own.sum() > 0:
        return own / own.sum()
    found = _siblings(moves, component, states, row, onto)
    if len(found) == 1:
        return np.eye(len(onto))[found[0]]
    origin = states.names[component.report[row]]
    ways = "its structure gives no hint" if not len(found) else f"its structure allows {len(found)} of them"
    raise NotIdentified(
        f'No move from "{origin}" to "{to}" was seen in part of the model (row {row} of '
        f'"{component.name}"), and the '
        f'model has {int(onto.sum())} places for "{to}": {ways}. Use the plain model for this change.'
    )


def _siblings(
    moves: Array, component: Component, states: States, row: int, onto: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Places of the target that rows like this one lead to."""
    inner = (moves > 0) & ~states.exit_mask[component.report]
    alike = (inner & inner[row]).any(axis=1)
    staying = onto[row]
    alike &= onto if staying else ~onto
    return np.flatnonzero(onto & (moves[alike] > 0).any(axis=0))
