"""May one believe it: the tests of the assumptions and the past forecasts that a study amounts to."""

from __future__ import annotations

from dataclasses import replace

from cohortflow.assessment import Adequacy, Backtest, Choice, adequacy, backtest, choose
from cohortflow.assessment.windows import Windows, silence_windows
from cohortflow.errors import NotIdentified
from cohortflow.estimator.variants import MODELS
from cohortflow.runs.steps import model_options
from cohortflow.study import Study
from cohortflow.tally import Tally

ORIGINS = 12
FARTHEST = 12  # periods ahead that a backtest scores, if the study looks that far
BEST = "best"
CANDIDATES = tuple(name for name in MODELS if name != "mover_stayer")  # "mixture" has it as a special case


def adequacy_study(study: Study, tally: Tally, *, by: str | None = None) -> Adequacy:
    """`cf.adequacy(tally, horizon=..., level=..., rng=..., by=...)`."""
    return adequacy(tally, horizon=study.horizon, level=study.level, rng=study.seed, by=by)


def backtest_study(study: Study, tally: Tally) -> Backtest:
    """`cf.backtest(tally, models=[...], horizon=..., ...)`: the study's model beside the plain one.

    With model "best" every model is tried. The horizon is the study's, at most 12 periods, and shorter where
    the history is too short for that.
    """
    names = CANDIDATES if study.model.name == BEST else tuple(dict.fromkeys(["plain", study.model.name]))
    return backtest(
        tally,
        models=[name for name in names if name != "segment" or _can_segment(study, tally)],
        horizon=_horizon(study, tally),
        origins=ORIGINS,
        level=study.level,
        joiners=study.joiners.method if "starts" in tally.meta.tables else "none",
        totals=study.totals,
        rng=study.seed,
        options={name: model_options(study, name) for name in names},
    )


def chosen(study: Study, tested: Backtest) -> tuple[Study, Choice | None]:
    """The study with the model that the backtest chooses, if it asks for the best one."""
    if study.model.name != BEST:
        return study, None
    choice = choose(tested, rng=study.seed)
    return replace(study, model=replace(study.model, name=choice.model)), choice


def _horizon(study: Study, tally: Tally) -> int:
    periods = tally.meta.last - tally.meta.first + 1
    longest = (periods - 1) // 2
    if longest < 1:
        raise NotIdentified(
            f"{periods} periods of history are too few to forecast from a past origin and see what came of it."
        )
    return min(study.horizon, FARTHEST, longest)


def _can_segment(study: Study, tally: Tally) -> bool:
    return any(role == "segment" for _, role in tally.meta.segment_columns) and study.model.name == BEST


def windows_study(study: Study, tally: Tally) -> Windows:
    """`cf.silence_windows(tally, {exit: 2k})`: windows of 1 to 2k periods for each exit by silence of k."""
    longest: dict[str, int] = {}
    for rule in study.rules if study.input.layout == "events" else ():
        asked = [condition.k for condition in rule.conditions if condition.kind == "silent_for"]
        if rule.role == "exit" and asked:
            longest[rule.name] = 2 * max(asked)
    if not longest:
        raise NotIdentified("No exit of the study asks for silence (silent_for), so there is no window to judge.")
    return silence_windows(tally, longest, level=study.level)
