"""The draws of a comparison: what the scenario changes in each of them. Figures are made when they are asked
for.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws
from cohortflow.whatif.paths import Gains, Step, steps_of, walk_gains
from cohortflow.whatif.setting import Setting
from cohortflow.whatif.settle import Settled, settle

Array = NDArray[np.float64]

MONEY = ("value", "cost", "net")


@dataclass(frozen=True, eq=False)
class Scattered:
    """D draws of a comparison.

    weights : quantity -> (K,);  steps : without and with the scenario;  gains : differences by period
    """

    at: Setting
    weights: Mapping[str, Array]
    size: int
    steps: tuple[list[Step], list[Step]]
    gains: Gains

    @classmethod
    def of(
        cls, at: Setting, weights: Mapping[str, Array], draws: Draws, rng: np.random.Generator
    ) -> Scattered:
        """Walk both sides of every draw; joiners and estimated amounts are drawn too, in common."""
        shift = at.drawn_shift(draws.size, rng)
        first, second = (steps_of(side.course, side.prices, draws, shift) for side in at.sides)
        gains = walk_gains(first, second, at.start, at.inflows(draws.size, rng), draws.size)
        return cls(at, weights, draws.size, (first, second), gains)

    def by_period(self, name: str) -> Array:
        """(H, D) differences of a quantity, money discounted."""
        if name in MONEY:
            factor = self.at.discount[:, None]
            return _money(name, factor * self.gains.paid, factor * self.at.costs(self.gains.treated))
        return _weighed(self.weights[name], self.gains.counts)

    def total(self, name: str) -> Array:
        """(D,) value, cost or net over all periods."""
        return self.by_period(name).sum(axis=0)

    def settled(self, name: str) -> Array:
        """(D,) a period in the long run, money undiscounted."""
        first, second = self.late
        if name in MONEY:
            return _money(name, second.paid - first.paid, self.at.late_costs(second.treated))
        return _weighed(self.weights[name], second.counts - first.counts)

    @cached_property
    def late(self) -> tuple[Settled, Settled]:
        """The long run of every draw, without and with the scenario."""
        return settle_both(self.at, self.steps, self.size)


def settle_both(at: Setting, steps: tuple[list[Step], list[Step]], size: int) -> tuple[Settled, Settled]:
    """Where it settles without and with the scenario."""
    first, second = (
        settle([step.priced(side.later_prices) for step in own], at.start, inflow, size)
        for side, own, inflow in zip(at.sides, steps, at.long_inflows(), strict=True)
    )
    return first, second


def _money(name: str, paid: Array, cost: Array) -> Array:
    return paid - cost if name == "net" else cost if name == "cost" else paid


def _weighed(weight: Array, counts: Array) -> Array:
    """(..., D) from (..., K, D); a single state is a view."""
    if np.count_nonzero(weight) == 1 and weight.max() == 1:
        return counts[..., int(weight.argmax()), :]
    return weight @ counts
