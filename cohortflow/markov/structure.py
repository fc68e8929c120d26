"""Which states lead where: classes, closed classes, periods, and what the limit theorem allows.

Source: Kemeny & Snell (1960), Finite Markov Chains, ch. 2; Seneta (1981), Non-negative Matrices and
Markov Chains, ch. 1.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse.csgraph import connected_components

from cohortflow.errors import CallError
from cohortflow.markov.arguments import Array, Flags, check_states, check_stochastic, grid, read_only


@dataclass(frozen=True, eq=False)
class Structure:
    """How the K states of a chain hang together; indices of states throughout.

    classes     communicating classes, each sorted, in order of their smallest member
    closed      those that nobody leaves
    transient   states outside every closed class
    periods     period of each closed class, in the order of `closed`
    reachable   (K, K) flags: column can be reached from row in none or more steps
    verdict     "unique_limit"       one closed class, of period 1: every start ends in the same mix
                "depends_on_start"   several closed classes, all of period 1: a limit, but one for each start
                "no_limit"           some closed class is periodic: the mix cycles; only a time average exists
    """

    classes: tuple[tuple[int, ...], ...]
    closed: tuple[tuple[int, ...], ...]
    transient: tuple[int, ...]
    periods: tuple[int, ...]
    reachable: Flags
    verdict: str

    @property
    def absorbing(self) -> tuple[int, ...]:
        """States that, once entered, are never left."""
        return tuple(group[0] for group in self.closed if len(group) == 1)

    @property
    def irreducible(self) -> bool:
        """Every state can be reached from every other."""
        return len(self.classes) == 1


def analyse(P: ArrayLike) -> Structure:
    """The structure of the chain with transition matrix P, shape (K, K). Raises CallError for a bad matrix.

    Only which entries are positive matters, exactly: 1e-300 is a move, 0 is none.

    >>> analyse([[0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.2, 0.3, 0.5]])  # doctest: +NORMALIZE_WHITESPACE
    Structure(classes=((0, 1), (2,)), closed=((0, 1),), transient=(2,), periods=(2,),
              reachable=array([[ True,  True, False], [ True,  True, False], [ True,  True,  True]]),
              verdict='no_limit')
    """
    return structure_of(check_stochastic(P))


def structure_of(matrix: Array) -> Structure:
    """`analyse` for a matrix that has been checked."""
    moves = matrix > 0
    classes = communicating_classes(moves)
    closed = tuple(group for group in classes if is_closed(moves, group))
    inside = {state for group in closed for state in group}
    periods = tuple(period(moves, group) for group in closed)
    return Structure(
        classes=classes,
        closed=closed,
        transient=tuple(state for state in range(len(moves)) if state not in inside),
        periods=periods,
        reachable=read_only(reachability(moves)),
        verdict=_verdict(periods),
    )


def reachability(moves: NDArray[Any]) -> Flags:
    """Flags (K, K): column can be reached from row in none or more steps; `moves` is read as zero or not.

    >>> reachability(np.array([[0, 1, 0], [0, 0, 1], [0, 0, 1]])).astype(int)
    array([[1, 1, 1],
           [0, 1, 1],
           [0, 0, 1]])
    """
    reached = ((moves > 0) | np.eye(len(moves), dtype=bool)).astype(np.float32)
    for _ in range(max(1, math.ceil(math.log2(len(moves))))):
        reached = (reached @ reached > 0).astype(np.float32)
    return reached > 0


def communicating_classes(moves: NDArray[Any]) -> tuple[tuple[int, ...], ...]:
    """Classes of states that reach each other, each sorted, in order of their smallest member.

    >>> communicating_classes(np.array([[0, 1, 0], [0, 0, 1], [0, 1, 0]]))
    ((0,), (1, 2))
    """
    count, label = connected_components(moves > 0, directed=True, connection="strong")
    return tuple(sorted(tuple(np.flatnonzero(label == c).tolist()) for c in range(count)))


def is_closed(moves: NDArray[Any], members: Iterable[int]) -> bool:
    """Whether no move leads out of the set.

    >>> is_closed(np.array([[0, 1, 0], [0, 0, 1], [0, 1, 0]]), (1, 2))
    True
    """
    inside = np.zeros(len(moves), dtype=bool)
    inside[list(members)] = True
    return not (moves > 0)[inside][:, ~inside].any()


def period(moves: NDArray[Any], members: Iterable[int]) -> int:
    """Period of a communicating class: greatest common divisor of the lengths of its round trips; 0 if none.

    >>> period(np.array([[0, 1, 0], [0, 0, 1], [1, 0, 0]]), (0, 1, 2))
    3
    """
    inside = (moves > 0)[grid(tuple(members), tuple(members))]
    level = _levels(inside)
    origin, target = np.nonzero(inside)
    return int(np.gcd.reduce(level[origin] + 1 - level[target], initial=0))


def cyclic_groups(moves: NDArray[Any], members: Iterable[int]) -> tuple[tuple[int, ...], ...]:
    """The d groups of a class of period d, in the order of visits; the first holds the smallest state.

    >>> cyclic_groups(np.array([[0, 1, 1], [1, 0, 0], [1, 0, 0]]), (0, 1, 2))
    ((0,), (1, 2))
    """
    chosen = np.array(sorted(members))
    level = _levels((moves > 0)[grid(chosen, chosen)])
    length = max(1, period(moves, chosen.tolist()))
    return tuple(tuple(chosen[level % length == phase].tolist()) for phase in range(length))


def leads_to(moves: NDArray[Any], targets: Iterable[int], *, barred: Iterable[int] = ()) -> Flags:
    """Flags (K,): a path leads from the state to a target in none or more steps, never out of a barred state.

    >>> leads_to(np.array([[0, 1, 0], [0, 0, 1], [0, 0, 1]]), [1])
    array([ True,  True, False])
    """
    moves = moves > 0
    reached = np.zeros(len(moves), dtype=bool)
    reached[list(targets)] = True
    open_to = np.ones(len(moves), dtype=bool)
    open_to[list(barred)] = False
    frontier = reached
    while frontier.any():
        frontier = moves[:, frontier].any(axis=1) & open_to & ~reached
        reached = reached | frontier
    return reached


def surely_reaches(P: ArrayLike, targets: Iterable[int]) -> Flags:
    """Flags (K,): from this state the chain enters the targets with certainty (a target itself: at once).

    >>> surely_reaches([[0.5, 0.5, 0.0], [0.1, 0.8, 0.1], [0.0, 0.0, 1.0]], [1])
    array([ True,  True, False])
    """
    matrix = check_stochastic(P)
    return sure(matrix > 0, check_states(targets, len(matrix), name="targets"))


def sure(moves: NDArray[Any], targets: Iterable[int]) -> Flags:
    """`surely_reaches` for flags of moves: no path leads to where the targets are out of reach."""
    targets = tuple(targets)
    lost = ~leads_to(moves, targets)
    return ~leads_to(moves, np.flatnonzero(lost).tolist(), barred=targets)


def determined(P: ArrayLike, *, allowed: ArrayLike | None = None) -> tuple[int, ...]:
    """States whose future is known though some rows of P (K, K) are NaN: no path leads to such a row.

    They never move to the others, so P cut down to them is a chain of its own, and everything that starts
    in them can be had from it. `allowed`: flags (K, K) of the moves that may happen, where P > 0 alone
    would trust that what was not seen cannot be.

    >>> P = [[0.9, 0.1, 0.0], [0.5, 0.5, 0.0], [float("nan")] * 3]
    >>> determined(P)
    (0, 1)
    >>> determined(P, allowed=[[1, 1, 0], [1, 1, 1], [0, 0, 1]])
    ()
    """
    matrix = np.asarray(P, dtype=float)
    moves = matrix > 0 if allowed is None else np.asarray(allowed) > 0
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or moves.shape != matrix.shape:
        raise CallError(f"P has shape {matrix.shape} and allowed {moves.shape}; both must be the same square")
    unknown = np.flatnonzero(np.isnan(matrix).any(axis=1)).tolist()
    return tuple(np.flatnonzero(~leads_to(moves, unknown)).tolist())


def _levels(inside: Flags) -> NDArray[np.int64]:
    """Steps from the first state of a communicating class to each of its states."""
    level = np.full(len(inside), -1, dtype=np.int64)
    level[0], depth = 0, 0
    while (level < 0).any():
        found = inside[level == depth].any(axis=0) & (level < 0)
        if not found.any():
            raise CallError(
                "the states do not all reach each other; a period belongs to one communicating class"
            )
        depth += 1
        level[found] = depth
    return level


def _verdict(periods: tuple[int, ...]) -> str:
    if any(length > 1 for length in periods):
        return "no_limit"
    return "unique_limit" if len(periods) == 1 else "depends_on_start"
