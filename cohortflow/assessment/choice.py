"""Which model: the one whose past bands were best, by how much, and how sure that is.

    loss of an origin = mean over horizons and quantities of  interval score / the reference model's mean score

so that a loss of 0.9 means scores a tenth better than the reference model's ("plain", else the first named).
Only origins from which every model forecast count. Doubt: the paired difference to the next best, with an
error that allows for overlapping horizons, and the share of resampled records (circular blocks of origins, as
long as the horizon) in which each model comes first.

Sources: Diebold & Mariano (1995) J. Bus. Econ. Stat. 13, 253; Politis & Romano (1992), circular blocks.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.assessment.backtest import OF_ORIGIN, Backtest
from cohortflow.assessment.rivals import RIVALS
from cohortflow.assessment.scores import compare_losses
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.record import Record

RESAMPLES = 2000
QUANTITIES = ("all_live", OF_ORIGIN)


@dataclass(frozen=True, repr=False, eq=False)
class Choice(Record):
    """The chosen model and the record it rests on.

    model : the model with the smallest loss;  runner_up : the next best ("" when there is one model only)
    gain : 1 - its loss / the runner-up's;  p_value : of no difference between the two (NaN: too few origins)
    notes : codes: "clear" or "in_doubt"; "behind:last_mix" for each rival with a smaller loss
    frame : model, candidate, loss, difference (to the chosen), std_error, p_value, chance_best, origins
    """

    model: str
    runner_up: str
    gain: float
    p_value: float
    notes: tuple[str, ...]
    frame: pd.DataFrame
    reference: str
    origins: int
    kind: ClassVar[str] = "choice"

    def to_frame(self) -> pd.DataFrame:
        """model, candidate, loss, difference, std_error, p_value, chance_best, origins; best first."""
        return self.frame

    def headline(self) -> str:
        over = f", {self.gain:.1%} better than {self.runner_up}" if self.runner_up else ""
        return f"choice by backtest: {self.model}{over} ({self.origins} origins)"

    def about(self) -> Mapping[str, Any]:
        return {
            "model": self.model,
            "runner_up": self.runner_up,
            "gain": self.gain,
            "notes": list(self.notes),
        }


def choose(
    record: Backtest, *, quantities: Sequence[str] = QUANTITIES, rng: int | np.random.Generator = 1
) -> Choice:
    """The model with the smallest mean loss over past origins (see the module text).

    quantities : what the scores are of; those that the counts could not tell are left out

    Raises CallError for unknown quantities; NotIdentified when there is no origin that all models share.
    """
    unknown = [q for q in quantities if q not in record.history]
    if unknown or not quantities:
        raise CallError(
            f"This backtest does not score {listed(unknown)}. It scores {listed(record.history)}."
        )
    reference = "plain" if "plain" in record.models else record.models[0]
    losses = origin_losses(record, quantities, reference)
    candidates = [m for m in losses.columns if m in record.models]
    order = [*losses[candidates].mean().sort_values(kind="stable").index]
    best = order[0]
    chances = _chances(losses[candidates], record.horizon, np.random.default_rng(rng))
    rows = []
    for name in losses.mean().sort_values(kind="stable").index:
        d = compare_losses(losses[name], losses[best], horizon=record.horizon)
        chance = chances.get(name, np.nan)
        is_model = name in candidates
        rows.append(
            (name, is_model, losses[name].mean(), d.mean, d.std_error, d.p_value, chance, len(losses))
        )
    columns = ["model", "candidate", "loss", "difference", "std_error", "p_value", "chance_best", "origins"]
    frame = pd.DataFrame(rows, columns=columns)
    return _choice(frame, order, reference, len(losses))


def origin_losses(record: Backtest, quantities: Sequence[str], reference: str) -> pd.DataFrame:
    """Loss by origin (rows) and model or rival (columns); rivals that lack a score somewhere are left out."""
    frame = record.frame[record.frame["quantity"].isin(list(quantities))]
    table = frame.pivot(index=["origin", "horizon", "quantity"], columns="model", values="interval_score")
    own = table[list(record.models)] if set(record.models) <= set(table.columns) else table.iloc[:0]
    table = table.loc[own.dropna().index].groupby(level=["horizon", "quantity"]).filter(lambda g: len(g) > 0)
    table = _whole_origins(table)
    if table.empty:
        raise NotIdentified(
            "There is no past origin from which every model could be fitted and scored; ask for fewer models "
            "or a shorter horizon."
        )
    scale = table[reference].groupby(level=["horizon", "quantity"]).transform("mean")
    losses = table.div(scale, axis=0).groupby(level="origin").mean()
    kept = [c for c in losses if c in record.models or not table[c].isna().any()]
    return losses[kept].reindex(sorted(losses.index, key=list(table.index.get_level_values(0)).index))


def _whole_origins(table: pd.DataFrame) -> pd.DataFrame:
    """Only origins that have every horizon and quantity that any origin has."""
    size = table.groupby(level="origin").size()
    return (
        table[table.index.get_level_values("origin").isin(size[size == size.max()].index)]
        if len(size)
        else table
    )


def _chances(losses: pd.DataFrame, horizon: int, rng: np.random.Generator) -> dict[str, float]:
    """Share of circular-block resamples of the origins in which each model comes first."""
    n = len(losses)
    length = min(max(horizon, 1), n)
    blocks = -(-n // length)
    starts = rng.integers(0, n, (RESAMPLES, blocks))
    rows = ((starts[:, :, None] + np.arange(length)) % n).reshape(RESAMPLES, -1)[:, :n]
    first = losses.to_numpy()[rows].mean(axis=1).argmin(axis=1)
    share = np.bincount(first, minlength=losses.shape[1]) / RESAMPLES
    return dict(zip(losses.columns, share.tolist(), strict=True))


def _choice(frame: pd.DataFrame, order: list[str], reference: str, origins: int) -> Choice:
    by_model = frame.set_index("model")
    best = order[0]
    loss = by_model["loss"]
    notes = [f"behind:{rival}" for rival in RIVALS if rival in loss.index and loss[rival] < loss[best]]
    if len(order) == 1:
        return Choice(best, "", np.nan, np.nan, tuple(notes), frame, reference, origins)
    second = order[1]
    p = float(by_model["p_value"][second])
    notes.insert(0, "clear" if p < 0.05 else "in_doubt")
    gain = float(1 - loss[best] / loss[second])
    return Choice(best, second, gain, p, tuple(notes), frame, reference, origins)
