"""What drives moves: a multinomial logit for each state on attributes of customers and series over periods.

Attributes are the tally's segment columns (values at first sight); a series is a number a period, matched to the
period in which the move is made. Effects are average marginal ones: by how much the probability of a move
changes when everybody had the value instead of the baseline (the commonest value), or for one unit of a
series, the rest left as it is. Errors are robust to customers who differ. `chain` gives the rates of a profile.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified, listed, nearest
from cohortflow.estimator.design import Design, StateLogit, series_of, state_logit, values_of
from cohortflow.estimator.interval import check_level
from cohortflow.estimator.window import choose_window, refuse_impossible
from cohortflow.record import Record, frozen_mapping
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[np.float64]

FEWEST_MOVES = 30


@dataclass(frozen=True, repr=False, eq=False)
class Drivers(Record):
    """Models of all states. `to_frame`: from, to, covariate, value, coefficient, std_error, effect, low, high,
    note (separated: the data hold no such move for this value, or only there; the effect's limits are open).
    """

    states: States
    design: Design
    models: Mapping[str, StateLogit]
    level: float
    pooled: Array
    tally: Tally
    notes: tuple[str, ...] = ()
    kind: ClassVar[str] = "drivers"

    def to_frame(self) -> pd.DataFrame:
        """One row a (from, to, covariate, value)."""
        rows = [row for name, model in self.models.items() for row in self._rows(name, model)]
        columns = [
            "from",
            "to",
            "covariate",
            "value",
            "coefficient",
            "std_error",
            "effect",
            "low",
            "high",
            "note",
        ]
        return pd.DataFrame(rows, columns=columns)

    def chain(
        self, profile: Mapping[str, str] | None = None, *, series: Mapping[str, float] | None = None
    ) -> Chain:
        """The rates of a profile: attributes or series not named are averaged over the moves that were seen.

        States without a model of their own (too few moves) have the pooled rates. CallError for unknown names.
        """
        given, over_time = dict(profile or {}), dict(series or {})
        self._check_profile(given, over_time)
        P = self.pooled.copy()
        for name, model in self.models.items():
            rows = [self.design.row({**key[0], **given}, {**key[1], **over_time}) for key in model.keys]
            rates = model.weight @ model.logit.rates(np.array(rows)) / model.weight.sum()
            P[self.states.index(name)] = 0.0
            P[self.states.index(name), model.outcomes] = rates
        return Chain(self.states, P, period=self.tally.calendar)

    def headline(self) -> str:
        names = [*self.design.values, *self.design.series]
        return f"drivers of moves out of {len(self.models)} states: {', '.join(names)}"

    def about(self) -> Mapping[str, Any]:
        baselines = {name: values[0] for name, values in self.design.values.items()}
        return {"level": self.level, "baselines": baselines, "notes": list(self.notes)}

    def _check_profile(self, profile: Mapping[str, str], series: Mapping[str, float]) -> None:
        for name, value in profile.items():
            known = self.design.values.get(name)
            if known is None:
                names = list(self.design.values)
                raise CallError(
                    f'Unknown attribute "{name}"{nearest(name, names)}. Attributes: {listed(names)}.'
                )
            if value not in known:
                raise CallError(
                    f'"{value}" is no value of "{name}"{nearest(value, known)}. Values: {listed(known)}.'
                )
        for name in series:
            if name not in self.design.series:
                raise CallError(f'Unknown series "{name}". Series: {listed(self.design.series)}.')

    def _rows(self, origin: str, model: StateLogit) -> list[tuple[Any, ...]]:
        out: list[tuple[Any, ...]] = []
        z = float(special.ndtri((1 + self.level) / 2))
        width = model.X.shape[1]
        errors = np.sqrt(np.maximum(np.diag(model.logit.covariance), 0.0)).reshape(-1, width)
        for k, (covariate, value) in enumerate(self.design.columns):
            if k == 0:
                continue
            effect, slope = average_effect(model, self.design, covariate, value)
            spread = np.sqrt(np.maximum(np.einsum("ja,ab,jb->j", slope, model.logit.covariance, slope), 0.0))
            for j, target in enumerate(model.outcomes):
                bad = (j, k) in model.logit.separated
                limits = (np.nan, np.nan) if bad else (effect[j] - z * spread[j], effect[j] + z * spread[j])
                coefficient = np.nan if j == model.logit.reference else model.logit.B[j, k]
                error = np.nan if j == model.logit.reference else errors[j, k]
                names = (origin, self.states.names[target], covariate, value)
                out.append((*names, coefficient, error, effect[j], *limits, "separated" if bad else ""))
        return out


def average_effect(
    model: StateLogit, design: Design, covariate: str, value: str | None
) -> tuple[Array, Array]:
    """(J,) average marginal effect on each outcome, and its (J, J*p) derivative by the coefficients."""
    if value is None:
        column = [name for name, _ in design.columns].index(covariate)
        step = 1e-5
        up, down = model.X.copy(), model.X.copy()
        up[:, column] += step
        down[:, column] -= step
        (one, a), (two, b) = _mean(model, up), _mean(model, down)
        return (one - two) / (2 * step), (a - b) / (2 * step)
    base = design.values[covariate][0]
    ends = []
    for level in (value, base):
        ends.append(
            _mean(model, np.array([design.row({**k[0], covariate: level}, k[1]) for k in model.keys]))
        )
    return ends[0][0] - ends[1][0], ends[0][1] - ends[1][1]


def _mean(model: StateLogit, X: Array) -> tuple[Array, Array]:
    """Mean rates over the moves at rows X, and their derivative by the coefficients."""
    p, w = model.logit.rates(X), model.weight / model.weight.sum()
    spread = np.einsum("gj,jk->gjk", p, np.eye(p.shape[1])) - np.einsum("gj,gk->gjk", p, p)
    slope = np.einsum("g,gjk,ga->jka", w, spread, X, optimize=True)
    return w @ p, slope.reshape(p.shape[1], -1)


def drivers(
    tally: Tally,
    attributes: Iterable[str] = (),
    *,
    series: pd.DataFrame | None = None,
    window: int | None = None,
    exclude: Iterable[str | int] = (),
    level: float = 0.95,
) -> Drivers:
    """Fit what drives moves.

    attributes : segment columns of the tally (segment, attribute or arm)
    series : numbers by period: index of labels or ordinals, one column a series
    window, exclude : as in `fit`

    Raises CallError for unknown attributes, a series that misses a period, or no covariate at all;
    NotIdentified when covariates repeat each other. States with fewer than 30 moves or one outcome have no
    model ("too_few:state").

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"])
    >>> rows = [(1, "fresh", "steady", 30), (1, "fresh", "left", 10)]
    >>> rows += [(2, "fresh", "steady", 20), (2, "fresh", "left", 20)]
    >>> price = pd.DataFrame({"price": [1.0, 2.0]}, index=[2, 3])  # of the periods in which the moves are made
    >>> found = drivers(cf.read_counts(rows, states), series=price)
    >>> found.chain(series={"price": 2.0}).matrix[0].round(3).tolist()
    [0.0, 0.5, 0.5]
    """
    check_level(level)
    names = list(attributes)
    chosen = choose_window(tally, window=window, exclude=exclude)
    moves = tally.one_step[chosen.keeps(tally.one_step["period"])]
    refuse_impossible(tally, moves)
    over_time = series_of(series, tally, moves)
    if not names and not over_time:
        raise CallError("drivers needs at least one attribute or series.")
    known = [name for name, _ in tally.meta.segment_columns]
    columns = [known.index(name) for name in names if tally.segment_values(name)]
    labels = [tuple(values[c] for c in columns) for values in tally.meta.segments]
    design = Design(values_of(moves, names, labels), over_time)
    pooled = np.zeros((len(tally.states),) * 2)
    np.add.at(pooled, (moves["state"], moves["next_state"]), moves["n"])
    total = pooled.sum(axis=1, keepdims=True)
    pooled = np.divide(pooled, total, out=np.full_like(pooled, np.nan), where=total > 0)
    pooled[tally.states.exit_mask] = np.eye(len(pooled))[tally.states.exit_mask]
    models, notes = {}, []
    for name in tally.states.remaining:
        rows = moves[moves["state"] == tally.states.index(name)]
        if rows["n"].sum() < FEWEST_MOVES or rows["next_state"].nunique() < 2:
            notes.append(f"too_few:{name}")
            continue
        models[name] = state_logit(rows, design, names, labels)
        notes += [] if models[name].logit.converged else [f"not_converged:{name}"]
    if not models:
        raise NotIdentified("No state has 30 moves with two outcomes, so nothing drives moves here.")
    return Drivers(tally.states, design, frozen_mapping(models), level, pooled, tally, tuple(notes))
