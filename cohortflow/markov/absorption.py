r"""How long until exit, which exit, and who is still there: chains with declared exits.

States that are not exits are `inside`; Q holds the moves among them, R the moves to exits.

    N = (I - Q)^{-1}                          expected periods in column, from row (the first one counts)
    tau = N 1                                 mean periods until exit
    var = N s,  s_i = sum_k p_ik (tau_k - (tau_i - 1))^2    variance, tau of an exit read as 0
    B = N R                                   probability of each exit
    S_n = Q^n 1                               retention: still inside after n periods

Solved by elimination without subtraction, so a base that hardly loses anybody keeps its digits.

Source: Kemeny & Snell (1960), Finite Markov Chains, ch. 3.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError
from cohortflow.markov.arguments import (
    Array,
    Flags,
    check_states,
    check_steps,
    check_stochastic,
    grid,
    read_only,
)
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.passage import scatter
from cohortflow.markov.powers import first_time
from cohortflow.markov.structure import communicating_classes, is_closed, leads_to, sure

_TIE = 1e-12


@dataclass(frozen=True)
class Caution:
    """What is not defined for one inside state, as a code and in words.

    code   "never_exits"     no exit can be reached: a probability of exit of 0, an infinite time
           "may_not_exit"    an exit is possible, not certain: the mean time is infinite, its spread undefined
    """

    state: int
    code: str
    reason: str


@dataclass(frozen=True, eq=False)
class Absorption:
    """Time to exit and which exit, from each inside state; arrays follow the order of `inside`.

    inside            (m,) indices of the states that are not exits
    exits             (e,) indices of the exits
    visits            (m, m) N; inf for a state that is visited for ever
    mean_time         (m,) periods; inf where exit is not certain
    variance_time     (m,) periods squared; NaN where exit is not certain
    exit_probability  (m, e) B; rows sum to the probability of ever leaving
    certain           (m,) flags: exit is certain
    undeclared        closed groups that hold no exit: whoever enters stays inside for ever
    cautions          one for each state from which exit is not certain
    """

    inside: tuple[int, ...]
    exits: tuple[int, ...]
    visits: Array
    mean_time: Array
    variance_time: Array
    exit_probability: Array
    certain: Flags
    undeclared: tuple[tuple[int, ...], ...]
    cautions: tuple[Caution, ...]
    matrix: Array = field(repr=False)

    @property
    def sd_time(self) -> Array:
        """(m,) standard deviation of the time to exit, periods."""
        return np.sqrt(self.variance_time)

    @property
    def median_time(self) -> Array:
        """(m,) median of the time to exit, whole periods; inf where fewer than half ever leave."""
        return self.quantile(0.5)

    def quantile(self, share: float) -> Array:
        """(m,) whole periods by which at least `share` has left; inf where that many never do.

        Shares equal to within 1e-12 count as reached.

        >>> absorb([[0.5, 0.5], [0.0, 1.0]], exits=[1]).quantile(0.9)
        array([4.])
        """
        if not 0 < share < 1:
            raise CallError(f"share is {share!r}; it must lie strictly between 0 and 1")
        ever = self.exit_probability.sum(axis=1)
        reachable = self.certain | (ever > share + _TIE)
        times = np.full(len(self.inside), math.inf)
        laws = np.eye(len(self.matrix))[list(self.inside)][reachable]
        if reachable.any():
            still = (1.0 - share) * (1.0 + _TIE)
            inside = list(self.inside)
            times[reachable] = first_time(self.matrix, laws, lambda mix: mix[:, inside].sum(axis=1) <= still)
        return times

    def retention(self, steps: int) -> Array:
        """S, shape (steps + 1, m): share still inside after 0, 1, ..., steps periods, from each inside state.

        >>> absorb([[0.5, 0.5], [0.0, 1.0]], exits=[1]).retention(2)[:, 0]
        array([1.  , 0.5 , 0.25])
        """
        within = self.matrix[grid(self.inside, self.inside)]
        curve = np.ones((check_steps(steps) + 1, len(within)))
        for n in range(1, len(curve)):
            curve[n] = within @ curve[n - 1]
        return curve

    def distribution(self, steps: int) -> Array:
        """f, shape (steps, m, e): probability of leaving by exit e in exactly period 1, ..., steps.

        >>> absorb([[0.5, 0.5], [0.0, 1.0]], exits=[1]).distribution(3)[:, 0, 0]
        array([0.5  , 0.25 , 0.125])
        """
        within = self.matrix[grid(self.inside, self.inside)]
        law = np.empty((check_steps(steps, least=1), len(self.inside), len(self.exits)))
        law[0] = self.matrix[grid(self.inside, self.exits)]
        for n in range(1, len(law)):
            law[n] = within @ law[n - 1]
        return law


def absorb(P: ArrayLike, exits: Iterable[int]) -> Absorption:
    """Everything about leaving for good, for a chain P (K, K) and the indices of its exits.

    Raises CallError when an exit has moves out of it, or when every state is an exit.

    >>> walk = absorb([[1.0, 0, 0, 0], [0.5, 0, 0.5, 0], [0, 0.5, 0, 0.5], [0, 0, 0, 1.0]], exits=[0, 3])
    >>> walk.mean_time, walk.exit_probability.round(4).tolist()
    (array([2., 2.]), [[0.6667, 0.3333], [0.3333, 0.6667]])
    """
    matrix = check_stochastic(P)
    out = check_states(exits, len(matrix), name="exits")
    inside = tuple(s for s in range(len(matrix)) if s not in out)
    if not inside:
        raise CallError("every state is named as an exit; at least one must be left inside")
    for state in out:
        onward = np.flatnonzero((matrix[state] > 0) & (np.arange(len(matrix)) != state))
        if onward.size:
            raise CallError(
                f"state {state} is named as an exit but has moves to {onward.tolist()}: an exit is "
                "never left; give returners a state of their own (away), or drop it from the exits"
            )
    return _solve(matrix, inside, out)


def _solve(matrix: Array, inside: tuple[int, ...], exits: tuple[int, ...]) -> Absorption:
    moves = matrix > 0
    stuck = tuple(g for g in communicating_classes(moves) if g[0] not in exits and is_closed(moves, g))
    certain = sure(moves, exits)
    # elimination runs over the states that are left for good sooner or later: to an exit or to a stuck group
    passing = [s for s in inside if not any(s in group for group in stuck)]
    visits, chance = np.zeros_like(matrix), np.zeros((len(matrix), len(exits)))
    mean, spread = np.where(certain, 0.0, math.inf), np.where(certain, 0.0, math.nan)
    if passing:
        block = grid(passing, passing)
        steps = eliminate(matrix[block], np.delete(matrix[passing], passing, axis=1).sum(axis=1))
        visits[block] = steps.inverse()
        chance[passing] = steps.solve(matrix[grid(passing, exits)])
    for group in stuck:
        visits[grid(np.flatnonzero(leads_to(moves, group)), group)] = math.inf
    leaving = [s for s in passing if certain[s]]
    mean[leaving] = visits[grid(leaving, leaving)].sum(axis=1)
    ahead = np.where(certain, mean, 0.0)
    around = scatter(matrix[leaving], ahead, ahead[leaving] - 1.0)
    spread[leaving] = visits[grid(leaving, leaving)] @ around
    rows = list(inside)
    return Absorption(
        inside=inside,
        exits=exits,
        visits=read_only(visits[grid(rows, rows)]),
        mean_time=read_only(mean[rows]),
        variance_time=read_only(spread[rows]),
        exit_probability=read_only(chance[rows]),
        certain=read_only(certain[rows]),
        undeclared=stuck,
        cautions=tuple(_caution(s, stuck, moves, chance[s].sum()) for s in inside if not certain[s]),
        matrix=read_only(matrix),
    )


def _caution(state: int, stuck: tuple[tuple[int, ...], ...], moves: Flags, ever: float) -> Caution:
    traps = [group for group in stuck if leads_to(moves, group)[state]]
    where = f"from state {state} the chain can enter {traps}, which no exit can be reached from"
    if ever == 0:
        return Caution(state, "never_exits", f"{where}, and no exit is ever taken: time to exit is infinite")
    return Caution(
        state,
        "may_not_exit",
        f"{where}: only {ever:.6g} ever leave, so the mean time to exit is infinite and its spread "
        "undefined; declare the group an exit, or find the missing departures",
    )
