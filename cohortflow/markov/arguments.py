"""What the functions of this room accept: matrices, starts and sets of states, checked at the door."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from cohortflow.errors import CallError

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

ROW_TOLERANCE = 1e-9


def check_stochastic(P: ArrayLike, *, name: str = "P") -> Array:
    """P as a fresh float array, after checking that it is square and that every row is a law.

    Raises CallError naming the first bad row: not a number, negative, or a sum off 1 by more than 1e-9.

    >>> check_stochastic([[0.9, 0.1, 0.0], [0.0, 0.8, 0.2], [0.0, 0.0, 1.0]]).sum()
    np.float64(3.0)
    >>> check_stochastic([[0.9, 0.1], [0.5, 0.4]])
    Traceback (most recent call last):
    cohortflow.errors.CallError: row 1 of P sums to 0.9; each row must sum to 1 (within 1e-09): ...
    """
    matrix = _square(P, name)
    for row in np.flatnonzero(np.abs(matrix.sum(axis=1) - 1.0) > ROW_TOLERANCE):
        raise CallError(
            f"row {row} of {name} sums to {matrix[row].sum():.12g}; each row must sum to 1 "
            f"(within {ROW_TOLERANCE:g}): divide the counts of a row by the row's own total"
        )
    return matrix


def check_substochastic(Q: ArrayLike, *, name: str = "Q") -> Array:
    """Q as a fresh float array: square, no negative entry, no row sum above 1 (within 1e-9).

    >>> check_substochastic([[0.7, 0.2], [0.3, 0.5]]).shape
    (2, 2)
    """
    matrix = _square(Q, name)
    for row in np.flatnonzero(matrix.sum(axis=1) > 1.0 + ROW_TOLERANCE):
        raise CallError(
            f"row {row} of {name} sums to {matrix[row].sum():.12g}; no row may sum to more than 1: "
            "leave the columns of the exits out and keep the rest as it is"
        )
    return matrix


def check_start(start: ArrayLike, states: int) -> Array:
    """The law of the start, shape (K,): given as such, or as the index of one state.

    >>> check_start(1, 3)
    array([0., 1., 0.])
    """
    if np.ndim(start) == 0:
        (state,) = check_states([start], states, name="start")
        return np.eye(states)[state]
    law = check_vector(start, states, name="start")
    if (law < 0).any() or abs(law.sum() - 1.0) > ROW_TOLERANCE:
        raise CallError(
            f"start must be a law, not negative and of sum 1; its smallest entry is {law.min():.6g} "
            f"and its sum {law.sum():.12g}. Divide the opening counts by their total, "
            "or name one state by its index"
        )
    return law


def check_vector(values: ArrayLike, states: int, *, name: str) -> Array:
    """Finite numbers, one for each state, shape (K,).

    >>> check_vector([34, 17.5, 0], 3, name="reward")
    array([34. , 17.5,  0. ])
    """
    vector = np.array(values, dtype=float)
    if vector.shape != (states,):
        raise CallError(f"{name} has shape {vector.shape}; it needs one number for each of {states} states")
    if not np.isfinite(vector).all():
        where = int(np.flatnonzero(~np.isfinite(vector))[0])
        raise CallError(f"{name}[{where}] is {vector[where]}; every entry must be a finite number")
    return vector


def check_states(chosen: Iterable[Any], states: int, *, name: str) -> tuple[int, ...]:
    """Indices of states, sorted, each once; at least one, each in 0 .. K-1.

    >>> check_states([2, 0, 2], 3, name="exits")
    (0, 2)
    """
    found = set()
    for item in chosen:
        if isinstance(item, bool) or not isinstance(item, int | np.integer) or not 0 <= item < states:
            raise CallError(f"{name} holds {item!r}; it takes indices of states, 0 to {states - 1}")
        found.add(int(item))
    if not found:
        raise CallError(f"{name} is empty; name at least one state by its index, 0 to {states - 1}")
    return tuple(sorted(found))


def check_steps(steps: int, *, name: str = "steps", least: int = 0) -> int:
    """A whole number of periods, not below `least`.

    >>> check_steps(12)
    12
    """
    if isinstance(steps, bool) or not isinstance(steps, int | np.integer) or steps < least:
        raise CallError(f"{name} is {steps!r}; it must be a whole number of periods, at least {least}")
    return int(steps)


def grid(rows: Iterable[int], columns: Iterable[int]) -> Any:
    """The index of a block of a matrix: these rows by these columns.

    >>> np.arange(9).reshape(3, 3)[grid([0, 2], [1])].tolist()
    [[1], [7]]
    """
    return np.ix_(np.array(list(rows), dtype=int), np.array(list(columns), dtype=int))


def read_only(values: ArrayLike) -> Any:
    """An array that a frozen record can carry: nobody can write into it."""
    array = np.array(values)
    array.setflags(write=False)
    return array


def _square(values: ArrayLike, name: str) -> Array:
    matrix = np.array(values, dtype=float)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or matrix.size == 0:
        raise CallError(
            f"{name} has shape {matrix.shape}; it must be a square matrix, row = from, column = to"
        )
    for row in np.flatnonzero(~np.isfinite(matrix).all(axis=1)):
        raise CallError(
            f"row {row} of {name} holds {matrix[row][~np.isfinite(matrix[row])][0]}: nothing is "
            f"known about moves out of state {row}; give the row a prior, or leave out "
            "that state and every start that can reach it"
        )
    for row in np.flatnonzero((matrix < 0).any(axis=1)):
        column = int(matrix[row].argmin())
        raise CallError(
            f"{name}[{row}, {column}] is {matrix[row, column]:.6g}; a probability is never negative"
        )
    return matrix
