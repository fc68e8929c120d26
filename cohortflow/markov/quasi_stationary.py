r"""The mix of those remaining, in a chain that loses mass, and the share of them kept a period.

Q holds the moves among the states that are not exits. Given that somebody is still inside, the mix tends
to u:

    u Q = lambda u, sum u = 1     u the mix of those remaining, lambda the share of them that stays a period
    Q w = lambda w, u w = 1       w_i: how much a start in i weighs in the end; left after n: lambda^n w_i

This needs one class of states that dominates: its own largest eigenvalue exceeds that of every other
class. Entry states that are never entered again do no harm; nor do states that the class leads to and
that empty faster. Where classes tie, the ends of the longest lines of tied classes make up the mix (see
`dominance`); two such ends make the mix depend on the start. A periodic class keeps a law u that repeats
itself, but from elsewhere the mix cycles.

Source: Darroch & Seneta (1965), Journal of Applied Probability 2; Seneta (1981), Non-negative Matrices,
ch. 7; van Doorn & Pollett (2009), Linear Algebra Appl. 430 (reducible Q).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import NotIdentified
from cohortflow.markov.arguments import Array, check_start, check_substochastic, grid, read_only
from cohortflow.markov.dominance import Dominance
from cohortflow.markov.structure import reachability


@dataclass(frozen=True, eq=False)
class Remaining:
    """The mix of those who have not left; m states in the order of Q.

    mix         (m,) u; NaN when there is none
    retention   lambda, the share of those remaining kept a period in the end; 0 when all leave in finite time
    weight      (m,) w; inf where the share left falls more slowly than lambda^n; NaN when there is no mix
    ratio       |lambda_2| / lambda: the factor by which other mixes fade a period; 1: more slowly than that
    dominant    the class that dominates
    applies_to  starts from which those remaining end in `mix`; other starts end elsewhere or leave no one
    code        "exists"            from every start
                "some_starts"       from the starts in `applies_to` only
                "depends_on_start"  several classes tie; `remaining_from` gives the mix for one start
                "periodic"          u repeats itself, but from other starts the mix cycles
                "dies_out"          everybody has left after finitely many periods
    reason      the code in words, with the states concerned
    """

    mix: Array
    retention: float
    weight: Array
    ratio: float
    dominant: tuple[int, ...]
    applies_to: tuple[int, ...]
    code: str
    reason: str

    @property
    def exists(self) -> bool:
        """Whether those remaining settle into `mix` from the starts in `applies_to`."""
        return self.code in ("exists", "some_starts")


def remaining(Q: ArrayLike) -> Remaining:
    """The mix of those remaining for Q (m, m), with the conditions under which it exists. Raises CallError.

    >>> kept = remaining([[0.5, 0.4, 0.0], [0.0, 0.6, 0.3], [0.0, 0.3, 0.6]])
    >>> kept.mix.round(6), round(kept.retention, 6), kept.code
    (array([0. , 0.5, 0.5]), 0.9, 'exists')
    """
    matrix = check_substochastic(Q)
    return _record(Dominance(matrix), range(len(matrix)))


def remaining_from(Q: ArrayLike, start: ArrayLike) -> Array:
    """The mix, shape (m,), in which those who began in `start` (a law or a state) and remain end.

    Raises NotIdentified when the mix cycles or when nobody remains.

    >>> remaining_from([[0.8, 0.0, 0.0], [0.0, 0.8, 0.0], [0.1, 0.3, 0.5]], 2).round(6)
    array([0.25, 0.75, 0.  ])
    """
    matrix = check_substochastic(Q)
    law = check_start(start, len(matrix))
    reached = np.flatnonzero(reachability(matrix)[law > 0].any(axis=0)).tolist()
    lines = Dominance(matrix[grid(reached, reached)])
    found = _record(lines, reached)
    if found.code in ("periodic", "dies_out"):
        raise NotIdentified(f"there is no mix of those remaining from this start: {found.reason}")
    mix = np.zeros(len(matrix))
    for end, share in lines.shares(law[reached]).items():
        mix[reached] += share * lines.left(end)
    return mix


def _record(lines: Dominance, names: Sequence[int]) -> Remaining:
    """The record for the states called `names`."""
    size = len(names)
    unknown, everyone = np.full(size, math.nan), tuple(names)
    if lines.top == 0:
        reason = "no state can be come back to, so everybody has left after finitely many periods"
        return _frozen(unknown, 0.0, unknown, 0.0, (), (), "dies_out", reason)
    ratio = _ratio(lines)
    ends = [lines.ends(place) for place in range(size)]
    applies = tuple(names[place] for place in range(size) if ends[place])
    distinct = sorted(set().union(*ends))
    groups = [tuple(names[place] for place in lines.classes[end]) for end in distinct]
    if len(distinct) > 1:
        reason = f"the classes {groups} keep the same share a period, so the mix depends on the start"
        return _frozen(unknown, lines.top, unknown, ratio, (), applies, "depends_on_start", reason)
    left, right = lines.left(distinct[0]), lines.right(distinct[0])
    code, reason = _condition(lines, groups[0], [name for name in everyone if name not in applies])
    return _frozen(left, lines.top, right, ratio, groups[0], applies, code, reason)


def _condition(lines: Dominance, group: tuple[int, ...], others: list[int]) -> tuple[str, str]:
    if lines.cyclic:
        return (
            "periodic",
            f"the class {group} is periodic: the mix of those remaining cycles and does not settle",
        )
    slow = ", slowly because classes tie," if len(lines.tied) > 1 else ""
    if others:
        return (
            "some_starts",
            f"the class {group} dominates{slow} but cannot be reached from the starts {others}",
        )
    return "exists", f"the class {group} dominates{slow} from every start"


def _ratio(lines: Dominance) -> float:
    moduli = np.sort(np.abs(np.linalg.eigvals(lines.matrix)))
    return float(min(1.0, moduli[-2] / lines.top)) if len(moduli) > 1 else 0.0


def _frozen(
    mix: Array,
    retention: float,
    weight: Array,
    ratio: float,
    dominant: tuple[int, ...],
    applies_to: tuple[int, ...],
    code: str,
    reason: str,
) -> Remaining:
    return Remaining(read_only(mix), retention, read_only(weight), ratio, dominant, applies_to, code, reason)
