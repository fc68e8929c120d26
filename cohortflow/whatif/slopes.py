r"""A target's value on a model, and its derivative with respect to every matrix of the model.

    base           sequence_derivative of the markov room, with joiners
    settled base   left = entering (I - Q)^{-1},  right = (I - Q)^{-1} w,   dF / dP_ij = left_i right_j
    life           the same with a law that enters and w = 1: right is the mean time to exit
    value          horizon: v_k = rho_k + b M_k v_{k+1},   dF / dM_k,ij = b^(k + lag) x_ki (y_ij + b
                   v_{k+1,j}) for ever: `value_derivative` of the projector
    remaining      remaining_mix_derivative, retention_derivative of the markov room; over a season's matrices
                   G_k = A_k' G B_k', A_k the product before M_k, B_k after it

One LU factor and two solves serve the settled base and life. They act on the sequence of a model's matrices:
a season of n matrices is one system of n blocks.
Source: Caswell (2001), Matrix Population Models, ch. 9; checked by complex step and the markov room in the
tests.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.markov.derivative import remaining_mix_derivative, retention_derivative, sequence_derivative
from cohortflow.projector.mix import filled
from cohortflow.projector.money import Terms, value_derivative
from cohortflow.whatif.block import Block
from cohortflow.whatif.target import Target

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Slopes:
    """value of the target, and one (L, m, m) derivative a component; NaN where a move leads out of the
    known.
    """

    value: float
    gradients: tuple[Array, ...]


def slopes(target: Target, schedule: Schedule) -> Slopes:
    """The target and its derivatives; NotIdentified where the model does not have this figure."""
    return _WAYS[target.measure](target, schedule)


def _base(target: Target, schedule: Schedule) -> Slopes:
    value, out = 0.0, []
    for part in schedule.components:
        steps = [target.first_step + h for h in range(target.horizon or 0)]
        found = sequence_derivative(
            [filled(part.matrix(h)) for h in steps],
            target.start @ part.start,
            weights=(part.collapse(len(schedule.states)) @ target.weight)[:, None],
            joiners=target.inflow[: len(steps)] @ part.join,
        )
        gradient = np.zeros_like(part.matrices)
        for h, step in zip(steps, found, strict=True):
            gradient[part.position(h)] += step.gradient(0)
        value += float(found[0].value[0])
        out.append(gradient)
    return Slopes(value, tuple(out))


def _settled_base(target: Target, schedule: Schedule) -> Slopes:
    return _flow(
        target, schedule, lambda part, block: block.everywhere(target.constant @ part.join), mean=True
    )


def _life(target: Target, schedule: Schedule) -> Slopes:
    joining = target.of == "joiners"
    return _flow(
        target,
        schedule,
        lambda part, block: block.at_once(target.start @ (part.join if joining else part.start)),
        mean=False,
    )


def _flow(
    target: Target, schedule: Schedule, entering: Callable[[Component, Block], Array], *, mean: bool
) -> Slopes:
    """sum over places of the customers that `entering` keeps up there; `mean`: an average over a season."""
    value, out = 0.0, []
    for part in schedule.components:
        block = Block.of(part, schedule, target.first_step)
        weight = target.weight[part.report] if mean else np.ones(len(part.report))
        weight = weight / (block.cycle if mean else 1)
        left, right = block.solve(entering(part, block), weight)
        value += float(left.sum(axis=0) @ weight)
        slope = {p: _outer(left[k], right[block.onward(k)]) for k, p in enumerate(block.positions)}
        out.append(_stacked(slope, part))
    return Slopes(value, tuple(out))


def _stacked(slope: dict[int, Array], part: Component) -> Array:
    """(L, m, m) out of the matrices that act; the others have no slope."""
    if len(part.matrices) == 1:
        return slope[0][None]
    out = np.zeros_like(part.matrices)
    for position, values in slope.items():
        out[position] = values
    return out


def _outer(left: Array, right: Array) -> Array:
    """left_i right_j; 0 where nobody is, also towards places of no certain exit."""
    out = left[:, None] * right
    if np.isnan(right).any():
        out[left == 0] = 0.0
    return out


def _value(target: Target, schedule: Schedule) -> Slopes:
    value, out = 0.0, []
    terms = target.money.terms
    assert terms is not None
    for part in schedule.components:
        amounts = _expanded(terms, part.report)
        law = target.start @ (part.join if target.of == "joiners" else part.start)
        if target.horizon is None:
            found, gradient = _for_ever(target, schedule, part, law, amounts)
        else:
            inflow = target.inflow @ part.join if target.of == "total" else None
            found, gradient = _until(target, part, law, inflow, amounts)
        value += found
        out.append(gradient)
    return Slopes(value, tuple(out))


def _until(
    target: Target, part: Component, law: Array, inflow: Array | None, terms: Terms
) -> tuple[float, Array]:
    y, b, horizon = terms.amounts(), terms.factor, target.horizon or 0
    steps = [target.first_step + h for h in range(horizon)]
    matrices = [filled(part.matrix(h)) for h in steps]
    ahead = [np.zeros(len(y))]
    for matrix in reversed(matrices):
        ahead.append((matrix * y).sum(axis=1) + b * matrix @ ahead[-1])
    x, value, gradient = law, 0.0, np.zeros_like(part.matrices)
    for h, matrix in enumerate(matrices):
        scale = b ** (h + terms.lag)
        value += scale * float(x @ (matrix * y).sum(axis=1))
        gradient[part.position(steps[h])] += scale * x[:, None] * (y + b * ahead[horizon - 1 - h])
        x = x @ matrix if inflow is None else x @ matrix + inflow[h]
    return value, gradient


def _for_ever(
    target: Target, schedule: Schedule, part: Component, law: Array, terms: Terms
) -> tuple[float, Array]:
    block = Block.of(part, schedule, target.first_step)
    n, m = len(block.positions), len(part.report)
    whole = np.zeros((n, m, n, m))
    for k, position in enumerate(block.positions):
        whole[k, :, block.onward(k)] = filled(part.matrices[position])
        whole[k, block.exits] = 0.0
        whole[k, block.exits, k, block.exits] = 1.0
    once = None if terms.once is None else np.tile(terms.once, n)
    many = replace(
        terms, per_period=np.tile(terms.per_period, n), on_move=np.tile(terms.on_move, (n, n)), once=once
    )
    found = value_derivative(whole.reshape(n * m, n * m), many, horizon=None)
    weights = block.at_once(law).ravel()
    there = weights != 0
    value = float(weights[there] @ found.value[there])
    if not np.isfinite(value):
        raise NotIdentified(
            "Without a discount and with customers who never leave, the value for ever has no limit. Give a "
            "discount_rate, or a horizon."
        )
    grid = found.along(weights).reshape(n, m, n, m)
    gradient = np.zeros_like(part.matrices)
    for k, position in enumerate(block.positions):
        gradient[position] += grid[k, :, block.onward(k)]
    gradient[:, block.exits] = 0.0
    return value, gradient


def _expanded(terms: Terms, report: NDArray[np.int64]) -> Terms:
    """The terms over expanded states."""
    on_move = terms.on_move[np.ix_(report, report)]
    once = None if terms.once is None else terms.once[report]
    return replace(terms, per_period=terms.per_period[report], on_move=on_move, once=once)


def _remaining(target: Target, schedule: Schedule) -> Slopes:
    """Of the component that is left in the end."""
    rings = [_ring(part, schedule, target.first_step) for part in schedule.components]
    rates = [float(retention_derivative(ring.product).value[0]) ** (1 / len(ring.turns)) for ring in rings]
    lead = int(np.argmax(rates))
    if sum(rate >= rates[lead] * (1 - 1e-12) for rate in rates) > 1:
        raise NotIdentified(
            "Two kinds of customers remain for equally long, so the mix of those remaining is not one."
        )
    ring, part = rings[lead], schedule.components[lead]
    if target.measure == "remaining_retention":
        found = retention_derivative(ring.product)
        value, outer = (
            rates[lead],
            found.gradient(0) * rates[lead] / (len(ring.turns) * float(found.value[0])),
        )
    else:
        found = remaining_mix_derivative(ring.product)
        weights = (part.collapse(len(schedule.states)) @ target.weight)[ring.inside]
        value, outer = float(found.value @ weights), found.along(weights)
    out = [np.zeros_like(p.matrices) for p in schedule.components]
    for k, position in enumerate(ring.positions):
        before, after = (_product(t, len(ring.inside)) for t in (ring.turns[:k], ring.turns[k + 1 :]))
        out[lead][position][np.ix_(ring.inside, ring.inside)] += before.T @ outer @ after.T
    return Slopes(value, tuple(out))


@dataclass(frozen=True, eq=False)
class _Ring:
    positions: tuple[int, ...]
    inside: NDArray[np.int64]
    turns: list[Array]

    @property
    def product(self) -> Array:
        return _product(self.turns, len(self.inside))


def _ring(part: Component, schedule: Schedule, first_step: int) -> _Ring:
    """The matrices, exits left out, that come round for ever."""
    block = Block.of(part, schedule, first_step)
    positions = block.positions[-block.cycle :]
    if np.isnan(part.matrices[list(positions)]).any():
        raise NotIdentified(
            f"The mix of those remaining needs the row of every state, and there are no data for "
            f"{', '.join(schedule.unknown)}."
        )
    turns = [part.matrices[p][np.ix_(block.inside, block.inside)] for p in positions]
    return _Ring(positions, block.inside, turns)


def _product(matrices: list[Array], size: int) -> Array:
    out = np.eye(size)
    for matrix in matrices:
        out = out @ matrix
    return out


_WAYS: dict[str, Callable[[Target, Schedule], Slopes]] = {
    "base": _base,
    "settled_base": _settled_base,
    "life": _life,
    "value": _value,
    "remaining_mix": _remaining,
    "remaining_retention": _remaining,
}
