"""What may be done about it: the scenarios and the ranking of levers that a study amounts to.

Every call gets the study's level and seed, and all scenarios of a segment share their draws.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from cohortflow.errors import CallError, NotIdentified, StudyError, listed
from cohortflow.runs.steps import ALL, Forecast, fit_study, joiners_study, value_study
from cohortflow.study import Study
from cohortflow.tally import Tally
from cohortflow.whatif import Levers, Required, WhatIf, required_change, sensitivity, what_if

DRAWS = 2000
LEVER_DRAWS = 200
TOP = 5


@dataclass(frozen=True)
class Plans:
    """The what-ifs of one segment; `absent`: "scenario NAME" or "levers TARGET" -> why it could not be
    made.
    """

    segment: str
    scenarios: tuple[WhatIf, ...]
    levers: tuple[Levers, ...]
    absent: Mapping[str, str]


def plans_study(study: Study, forecast: Forecast) -> Plans:
    """`cf.what_if` of every scenario and `cf.sensitivity` of every target, for one segment's forecast."""
    absent: dict[str, str] = {}
    drawn = forecast.fit.draws(DRAWS, rng=study.seed) if study.scenarios else None
    scenarios = []
    for spec in study.scenarios:
        if spec.segment is not None and forecast.segment != ALL:
            continue
        try:
            scenarios.append(_scenario(study, forecast, spec, drawn))
        except NotIdentified as error:
            absent[f"scenario {spec.name}"] = str(error)
        except CallError as error:
            raise StudyError(f'[[scenario]] "{spec.name}": {error}') from error
    levers = []
    for target in targets(study, forecast):
        try:
            levers.append(levers_study(study, forecast, target))
        except NotIdentified as error:
            absent[f"levers {target}"] = str(error)
    return Plans(forecast.segment, tuple(scenarios), tuple(levers), absent)


def _scenario(study: Study, forecast: Forecast, spec: Any, drawn: Any) -> WhatIf:
    """`cf.what_if(fit, scenario, periods=..., joiners=..., value=..., totals=..., level=..., rng=...)`."""
    fitted, joiners, segment, money = forecast.fit, forecast.joiners, forecast.segment, forecast.value
    parts = [part.name for part in fitted.schedule.components]
    if spec.segment is not None and spec.segment not in parts:
        tally = segment_tally(study, fitted.tally, spec.segment)
        fitted = fit_study(study, tally)
        joiners, segment, drawn = joiners_study(study, tally, spec.segment), spec.segment, DRAWS
        money = value_study(study, fitted, joiners, level=study.level, rng=study.seed)
        spec = replace(spec, segment=None)  # the fit is that segment's own
    return what_if(
        fitted,
        spec,
        periods=study.horizon,
        joiners=joiners,
        value=money,
        totals=study.totals,
        level=study.level,
        draws=drawn,
        rng=study.seed,
        segment=segment,
    )


def levers_study(study: Study, forecast: Forecast, target: str) -> Levers:
    """`cf.sensitivity(fit, target=..., horizon=..., joiners=..., value=..., ...)`."""
    return sensitivity(
        forecast.fit,
        target=target,
        **_asked(study, forecast, target),
        draws=LEVER_DRAWS,
        segment=forecast.segment,
    )


def targets(study: Study, forecast: Forecast) -> list[str]:
    """The targets that levers are ranked by: value where money is counted, the base, the settled base,
    life.
    """
    coming = forecast.joiners.expected().any()
    return [
        *(["value:total"] if study.value is not None else []),
        "base",
        *(["settled_base", "life"] if coming and study.states.exits else []),
    ]


def required_study(
    study: Study, forecast: Forecast, target: str, reach: float | None, levers: Sequence[tuple[str, str]] = ()
) -> list[Required]:
    """`cf.required_change` of the named levers, or of the five that matter most to the target."""
    chosen = list(levers)
    if not chosen:
        name = "value:total" if target == "net" else target
        frame = levers_study(study, forecast, name).to_frame().head(TOP)
        chosen = list(zip(frame["from"], frame["to"], strict=True))
    asked = _asked(study, forecast, target)
    return [
        required_change(
            forecast.fit,
            lever,
            target=target,
            reach=reach,
            **asked,
            draws=LEVER_DRAWS,
            segment=forecast.segment,
        )
        for lever in chosen
    ]


def parse_target(text: str) -> tuple[str, float | None]:
    """("base:weekly", 5500.0) from "base:weekly=5500"; a target without a mark for "net".

    >>> parse_target("settled_base=6,500"), parse_target("net")
    (('settled_base', 6500.0), ('net', None))
    """
    name, equals, mark = text.partition("=")
    if not equals:
        return name.strip(), None
    try:
        return name.strip(), float(mark.replace(",", "").replace("_", ""))
    except ValueError:
        raise CallError(
            f'--target "{text}" has the mark "{mark}"; it is a number, for instance base=5500.'
        ) from None


def parse_lever(text: str) -> tuple[str, str]:
    """("quiet", "weekly") from "quiet:weekly".

    >>> parse_lever("quiet:weekly")
    ('quiet', 'weekly')
    """
    origin, colon, to = text.partition(":")
    if not colon or not origin.strip() or not to.strip():
        raise CallError(f'--lever "{text}" names a move as FROM:TO, for instance quiet:weekly.')
    return origin.strip(), to.strip()


def plan_tables(plans: Sequence[Plans]) -> dict[str, pd.DataFrame]:
    """The tables `scenarios` and `levers` of all segments."""
    found = {
        "scenarios": [record.to_frame() for part in plans for record in part.scenarios],
        "levers": [record.to_frame() for part in plans for record in part.levers],
    }
    return {name: pd.concat(frames, ignore_index=True) for name, frames in found.items() if frames}


def segment_tally(study: Study, tally: Tally, segment: str) -> Tally:
    """The counts of one segment, whichever segment column it is a value of."""
    columns = [name for name, _ in tally.meta.segment_columns]
    for column in columns:
        if segment in tally.segment_values(column):
            return tally.by_segment(column)[segment]
    raise StudyError(
        f'[[scenario]] segment = "{segment}" is no value of the segment columns {listed(columns)} of '
        f"{study.title}. Check its spelling in the extract."
    )


def _asked(study: Study, forecast: Forecast, target: str) -> dict[str, Any]:
    ahead = target.partition(":")[0] in ("base", "net") or target.startswith("value")
    return {
        "horizon": study.horizon if ahead else None,
        "joiners": forecast.joiners,
        "value": forecast.value,
        "totals": study.totals if target != "net" else None,
        "level": study.level,
        "rng": study.seed,
    }
