r"""Derivatives of money, over a horizon and for ever, with respect to P, the rewards and the discount factor.

    F = sum_{t<H} b^t x P^t r~,  r~_i = r_i + sum_j p_ij g_ij       a base x over H periods
    v = (I - b P)^{-1} r~                                           from each state, for ever

r: reward of a period spent in a state; g: reward of a move; b: discount factor a period. Period 0 counts
in full. How to read the results: `gradient`.

Source: Howard (1960), Dynamic Programming and Markov Processes; checked by complex step in the tests.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.arguments import (
    Array,
    check_steps,
    check_stochastic,
    check_substochastic,
    check_vector,
)
from cohortflow.markov.elimination import eliminate
from cohortflow.markov.gradient import Derivative, base_row
from cohortflow.markov.structure import leads_to


@dataclass(frozen=True, eq=False)
class ValueDerivative(Derivative):
    """A derivative of values, with those by the rewards, (T, K), and by the discount factor, (T,)."""

    by_reward: Array | None = None
    by_discount: Array | None = None


def horizon_value_derivative(
    P: ArrayLike,
    start: ArrayLike,
    reward: ArrayLike,
    *,
    steps: int,
    discount: float,
    move_reward: ArrayLike | None = None,
) -> ValueDerivative:
    """Of F = sum_{t<H} b^t x P^t r~ with r~_i = r_i + sum_j p_ij g_ij: one target.

    With V_H = 0 and V_k = r~ + b P V_{k+1}:  dF/dP_ij = sum_k b^k (x P^k)_i (b (V_{k+1})_j + g_ij).

    >>> found = horizon_value_derivative([[0.8, 0.2], [0.0, 1.0]], 0, [10.0, 0.0], steps=3, discount=1.0)
    >>> found.value, found.gradient(0)[0]
    (array([24.4]), array([26.,  0.]))
    """
    matrix = check_stochastic(P)
    size, horizon = len(matrix), check_steps(steps, least=1)
    factor = _discount(discount)
    money, per_move = _rewards(matrix, reward, move_reward)
    ahead = [np.zeros(size)]
    for _ in range(horizon):
        ahead.append(money + factor * matrix @ ahead[-1])
    bases = [base_row(start, size)]
    for _ in range(horizon - 1):
        bases.append(bases[-1] @ matrix)
    scale = factor ** np.arange(horizon)
    occupied = (scale[:, None] * bases).sum(axis=0)
    growth = np.arange(horizon) * factor ** np.maximum(np.arange(horizon) - 1, 0)
    return ValueDerivative(
        value=np.array([bases[0] @ ahead[-1]]),
        left=(scale[:, None] * bases)[:, None, :],
        right=np.stack([factor * ahead[horizon - 1 - k] for k in range(horizon)])[:, None, :],
        rows=occupied[None],
        cells=per_move,
        by_reward=occupied[None],
        by_discount=np.array([growth @ (np.stack(bases) @ money)]),
    )


def discounted_value_derivative(
    P: ArrayLike, reward: ArrayLike, *, discount: float, move_reward: ArrayLike | None = None
) -> ValueDerivative:
    """Of v = M r~, value for ever from each state, M = (I - b P)^{-1}: dv_a/dP_ij = M_ai (b v_j + g_ij).

    P may lose mass (the moves inside only); b = 1 then is allowed. by_reward is M, by_discount M P v.
    Raises NotIdentified when the value is infinite.

    >>> found = discounted_value_derivative([[0.8, 0.2], [0.0, 1.0]], [10.0, 0.0], discount=0.5)
    >>> found.value.round(6), found.gradient(0)[0].round(6)
    (array([16.666667,  0.      ]), array([13.888889,  0.      ]))
    """
    matrix = check_substochastic(P, name="P")
    factor = _discount(discount)
    money, per_move = _rewards(matrix, reward, move_reward)
    # a customer leaves the sum with the discount, or with the mass that the row loses
    lost = (1.0 - factor) + factor * np.clip(1.0 - matrix.sum(axis=1), 0.0, None)
    if not _drains(matrix, lost):
        raise NotIdentified(
            "with discount 1 and states that are never left the value is infinite: discount below 1, "
            "or leave the exits' columns out of P"
        )
    ahead = eliminate(factor * matrix, lost).inverse()
    value = ahead @ money
    return ValueDerivative(
        value=value,
        left=ahead[None],
        right=factor * value[None, None],
        rows=ahead,
        cells=per_move,
        by_reward=ahead,
        by_discount=ahead @ (matrix @ value),
    )


def _discount(discount: float) -> float:
    if not 0 < discount <= 1:
        raise CallError(f"discount is {discount!r}; the factor a period must lie in (0, 1]")
    return float(discount)


def _rewards(matrix: Array, reward: ArrayLike, move_reward: ArrayLike | None) -> tuple[Array, Array]:
    """Expected reward a period in each state, and the reward of each move."""
    money = check_vector(reward, len(matrix), name="reward")
    if move_reward is None:
        return money, np.zeros_like(matrix)
    per_move = np.asarray(move_reward, dtype=float)
    if per_move.shape != matrix.shape or not np.isfinite(per_move).all():
        raise CallError(
            f"move_reward has shape {per_move.shape}; it must hold a finite number for every cell of P"
        )
    return money + (matrix * per_move).sum(axis=1), per_move


def _drains(matrix: Array, lost: Array) -> bool:
    """Whether every state leads to one that loses mass."""
    return bool(leads_to(matrix, np.flatnonzero(lost > 0).tolist()).all())
