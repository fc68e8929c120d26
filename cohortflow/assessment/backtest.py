"""Backtest: forecasts as they would have been made in the past, held against what happened.

At each origin everything is refitted from the counts known then (`Tally.at_origin`): rates, shocks, joiners.
Horizons are kept apart. Two bases are forecast: all customers with joiners ("all_live", each state, the named
totals) and the customers of the origin alone ("all_live_of_origin"), whose number joiners do not touch.
Past plans of joiners are not known, so a planned number is replaced by last year's.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.assessment.outlook import Setting, SharedLuck, known_method
from cohortflow.assessment.past import PastForecast, slimmed
from cohortflow.assessment.rivals import RIVALS, STARTED, Observed, RivalForecasts
from cohortflow.assessment.scores import crps_normal, crps_sample, interval_score, log_score
from cohortflow.assessment.summary import summary, validated
from cohortflow.errors import CallError, CohortflowError, NotIdentified, listed, nearest
from cohortflow.estimator.variants import MODELS
from cohortflow.projector.accept import Array, weights_of
from cohortflow.projector.projection import nan_product
from cohortflow.record import Record
from cohortflow.tally import Tally

COLUMNS = (
    "model", "origin", "horizon", "quantity", "predicted", "actual", "low", "high", "inside", "crps",
    "interval_score",
)  # fmt: skip
OF_ORIGIN = "all_live_of_origin"
DRAWS = 400  # a forecast of now uses more; here every origin makes its own

Weights = Mapping[str, Array]


@dataclass(frozen=True, repr=False, eq=False)
class Backtest(Record):
    """Past forecasts against what happened.

    frame : the table `backtest`;  history : quantity -> (T,) what happened, for scales
    log_scores : model, origin, moves, log_score (mean -log probability of the next period's moves)
    notes : model, origin, note: forecasts that could not be made (the error's slug); "joiners_unknown"
        for bare counts, whose base is forecast as if nobody joined
    models, origins (ordinals), horizon, level, draws, joiners : what it rests on
    """

    frame: pd.DataFrame
    log_scores: pd.DataFrame
    notes: pd.DataFrame
    history: Mapping[str, np.ndarray]
    models: tuple[str, ...]
    origins: tuple[int, ...]
    first: int
    horizon: int
    level: float
    draws: int
    joiners: str
    kind: ClassVar[str] = "backtest"

    def to_frame(self) -> pd.DataFrame:
        """model, origin, horizon, quantity, predicted, actual, low, high, inside, crps, interval_score."""
        return self.frame

    @cached_property
    def scores(self) -> pd.DataFrame:
        """One row a model, horizon and quantity: model, horizon, quantity, origins, effective_origins,
        coverage,
        coverage_low, coverage_high, interval_score, crps, mean_error, mase, skill (against last_mix),
        note."""
        return summary(self)

    @cached_property
    def validated(self) -> pd.DataFrame:
        """model, quantity, periods, reason: how far ahead each record bears a model out (see summary.py)."""
        return validated(self.scores, self.level)

    def validated_to(self, model: str, quantity: str = "all_live") -> tuple[int, str]:
        """(periods, reason) of one model: 0 with the reason when its record bears out nothing."""
        rows = self.validated[(self.validated["model"] == model) & (self.validated["quantity"] == quantity)]
        if rows.empty:
            known = sorted(set(self.validated["model"]))
            raise CallError(
                f'This backtest has no model "{model}"{nearest(model, known)} with "{quantity}". Models: '
                f"{listed(known)}."
            )
        return int(rows["periods"].iloc[0]), str(rows["reason"].iloc[0])

    def headline(self) -> str:
        models, size = ", ".join(self.models), f"{len(self.origins)} origins x {self.horizon} periods"
        return f"backtest of {models}: {size}, {self.level:.0%} bands"

    def about(self) -> Mapping[str, Any]:
        return {
            "models": list(self.models),
            "rivals": list(RIVALS),
            "origins": len(self.origins),
            "horizon": self.horizon,
            "level": self.level,
            "draws": self.draws,
            "joiners": self.joiners,
            "validated": self.validated.to_dict(orient="records"),
            "notes": self.notes.to_dict(orient="records"),
        }


def backtest(
    tally: Tally,
    *,
    models: Sequence[str] = ("plain",),
    horizon: int = 6,
    origins: int = 12,
    level: float = 0.90,
    joiners: str = "last_year",
    totals: Mapping[str, Sequence[str]] | None = None,
    rng: int | np.random.Generator = 1,
    draws: int = DRAWS,
    options: Mapping[str, Mapping[str, Any]] | None = None,
) -> Backtest:
    """Refit models at past origins and score their forecasts, beside rivals that need no chain.

    Parameters
    ----------
    tally : Tally
    models : names of models;  options : model -> options of `fit`
    horizon, origins : periods ahead, and how many origins; each origin is old enough for every horizon
    level : of the bands;  draws : how many make a band (fewer than in a forecast of now)
    joiners : method of the joiner forecast ("planned" is replaced by "last_year"; where an origin's
        history is too short for it, "constant")
    totals : named sums of states, scored as well
    rng : seed or Generator; at one origin all models draw from the same random numbers

    Raises CallError for unknown models or settings; NotIdentified when the history is too short
    for one origin.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> moves = [(t, "steady", to, n) for t in range(10) for to, n in (("steady", 95), ("left", 5))]
    >>> found = backtest(cf.read_counts(moves, states, period="step"), horizon=2, origins=4, draws=100)
    >>> found
    <backtest of plain: 4 origins x 2 periods, 90% bands>
    >>> found.validated_to("plain")  # no model can be vouched for by four origins
    (0, 'too_few_origins')
    """
    setting = Setting(horizon, level, draws, known_method(joiners), totals, options)
    _check(models, setting, origins)
    at = _origins(tally, horizon, origins)
    seen = Observed.of(tally, horizon)
    weights = {**weights_of(tally.states, totals), OF_ORIGIN: tally.states.live_mask.astype(float)}
    book = _Book(_rival_rows(tally, seen, at, setting, weights), [], [])
    if "starts" not in tally.meta.tables:
        book.notes.append(("", "", "joiners_unknown"))
    seed = int(np.random.default_rng(rng).integers(2**62))
    slim = slimmed(tally, segments=any("by" in setting.of_model(m) for m in models))
    for origin in at:
        book.write(slim, seen, origin, models, setting, weights, seed)
    return Backtest(
        pd.DataFrame(book.rows, columns=list(COLUMNS)),
        pd.DataFrame(book.logs, columns=["model", "origin", "moves", "log_score"]),
        pd.DataFrame(book.notes, columns=["model", "origin", "note"]),
        {q: seen.mix @ w for q, w in weights.items()},
        tuple(models), tuple(at), seen.first, horizon, level, draws, setting.joiners,
    )  # fmt: skip


@dataclass(frozen=True)
class _Book:
    """Rows of the tables of a Backtest, as they are made."""

    rows: list[tuple[Any, ...]]
    logs: list[tuple[Any, ...]]
    notes: list[tuple[Any, ...]]

    def write(
        self,
        slim: Tally,
        seen: Observed,
        origin: int,
        models: Sequence[str],
        setting: Setting,
        weights: Weights,
        seed: int,
    ) -> None:
        """Every model's forecasts from one origin."""
        past, luck, label = slim.at_origin(origin), SharedLuck(), slim.calendar.label(origin)
        o = origin - seen.first
        happened = {q: _happened(seen, o, setting.horizon, q, w) for q, w in weights.items()}
        for model in models:
            try:
                made = PastForecast.of(
                    past, model, setting, luck, np.random.default_rng([seed, origin % 2**31])
                )
            except CohortflowError as error:
                self.notes.append((model, label, error.slug))
                continue
            self.rows.extend(_model_rows(model, label, made, happened, weights, setting))
            self.logs.append((model, label, *_log_score(slim, origin, made.next_step)))


def _model_rows(
    model: str,
    label: str,
    made: PastForecast,
    happened: Mapping[str, Array],
    weights: Weights,
    setting: Setting,
) -> list[tuple[Any, ...]]:
    """Rows of the table `backtest` of one model and origin."""
    out = []
    tails = [(1 - setting.level) / 2, (1 + setting.level) / 2]
    for quantity, weight in weights.items():
        drawn, mean = (made.alone, made.alone_mean) if quantity == OF_ORIGIN else (made.base, made.base_mean)
        paths, predicted, actual = nan_product(drawn, weight), nan_product(mean, weight), happened[quantity]
        low, high = np.quantile(paths, tails, axis=0)
        crps = crps_sample(paths, actual, fair=True)
        for h in range(1, setting.horizon + 1):
            figures = (predicted[h], actual[h], low[h], high[h])
            out.append(_row(model, label, h, quantity, figures, crps[h], setting.level))
    return out


def _rival_rows(
    tally: Tally, seen: Observed, at: Iterable[int], setting: Setting, weights: Weights
) -> list[tuple[Any, ...]]:
    out = []
    for rival in RIVALS:
        made = RivalForecasts.of(rival, seen, setting.horizon)
        for quantity, weight in weights.items():
            own = None if quantity == OF_ORIGIN else weight
            actual = made.of_quantity(own)[1]
            for origin in at:
                o, label = origin - seen.first, tally.calendar.label(origin)
                for h in range(1, setting.horizon + 1):
                    point, spread, low, high = made.band(own, o, h, setting.level)
                    crps = np.nan if np.isnan(spread) else float(crps_normal(point, spread, actual[o, h]))
                    figures = (point, actual[o, h], low, high)
                    out.append(_row(rival, label, h, quantity, figures, crps, setting.level))
    return out


def _happened(seen: Observed, o: int, horizon: int, quantity: str, weight: Array) -> Array:
    """(H+1,) what came of a quantity after period o of the window."""
    return seen.of_origin(o) if quantity == OF_ORIGIN else seen.mix[o : o + horizon + 1] @ weight


def _row(
    model: str, label: str, h: int, quantity: str, figures: Sequence[float], crps: float, level: float
) -> tuple[Any, ...]:
    predicted, actual, low, high = (float(f) for f in figures)
    known = not np.isnan([low, high, actual]).any()
    inside = bool(low <= actual <= high) if known else None
    score = float(interval_score(low, high, actual, level=level)) if known else np.nan
    return (model, label, h, quantity, predicted, actual, low, high, inside, float(crps), score)


def _log_score(tally: Tally, origin: int, law: np.ndarray) -> tuple[int, float]:
    """(moves, mean -log probability) of the moves out of the origin's period."""
    moves = tally.one_step
    moves = moves[moves["period"] == origin]
    p = law[moves["state"].to_numpy(), moves["next_state"].to_numpy()]
    n = moves["n"].to_numpy(float)
    known = ~np.isnan(p)
    return int(n[known].sum()), log_score(p[known], n[known])


def _origins(tally: Tally, horizon: int, wanted: int) -> list[int]:
    """The latest `wanted` periods from which every horizon has come true, oldest first."""
    first, last = tally.meta.first + STARTED, tally.meta.last - horizon
    at = list(range(max(first, last - wanted + 1), last + 1))
    if not at:
        raise NotIdentified(
            f"A backtest {horizon} periods ahead needs at least {STARTED + horizon + 1} periods of history; "
            f"there are {tally.meta.last - tally.meta.first + 1}. Ask for less, or read more history."
        )
    return at


def _check(models: Sequence[str], setting: Setting, origins: int) -> None:
    if isinstance(models, str):
        raise CallError(f'models takes a list of names, not the text "{models}"; write ["{models}"].')
    for model in models:
        if model not in MODELS:
            raise CallError(f'Unknown model "{model}"{nearest(model, MODELS)}. Models: {listed(MODELS)}.')
    if setting.horizon < 1 or origins < 1 or setting.draws < 2:
        raise CallError(
            f"horizon and origins are at least 1, draws at least 2; got {setting.horizon}, {origins} and "
            f"{setting.draws}."
        )
