"""Whether a chain is good enough for these customers: every assumption tested, and what its failure would do.

The verdict is `fails` only when a failure is clear and matters: when the model that drops the assumption
moves `all_live` at the horizon by half of the band's half-width or more. With many customers everything is clear.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.assessment.drift import eras_alike, periods_alike, seasons_alike
from cohortflow.assessment.duration import duration
from cohortflow.assessment.effect import Effects
from cohortflow.assessment.finding import Finding, verdict
from cohortflow.assessment.heterogeneity import customers
from cohortflow.assessment.ksteps import k_steps
from cohortflow.assessment.order import order
from cohortflow.assessment.outlook import Setting, known_method
from cohortflow.assessment.paths import Paths
from cohortflow.assessment.segments import segments
from cohortflow.errors import CallError
from cohortflow.record import Record
from cohortflow.tally import Tally

COLUMNS = ("segment", "check", "what", "statistic", "df", "p_value", "effect", "verdict", "advice")
SIMULATED = 20_000  # stays of at most so many customers are simulated for the k-step check


@dataclass(frozen=True, repr=False, eq=False)
class Adequacy(Record):
    """Findings about one tally.

    frame : the table `adequacy`; `effect` in customers of `all_live` at the horizon
    outlook : segment, all_live (expected at the horizon by the plain chain), half_width of its band
    gaps : segment, k, from, to, at_risk, observed, expected, gap: shares k periods later
    horizon, level, replications, customers : what it rests on
    """

    frame: pd.DataFrame
    outlook: pd.DataFrame
    gaps: pd.DataFrame
    horizon: int
    level: float
    replications: int
    customers: int
    kind: ClassVar[str] = "adequacy"

    def to_frame(self) -> pd.DataFrame:
        """segment, check, what, statistic, df, p_value, effect, verdict, advice.

        verdict : holds | doubtful | fails | not_testable;  advice : the repairing model ("" when it holds),
        for not_testable what is lacking (customer_rows, longer_history, two_cycles, no_calendar,
        segment_column, too_few_moves)
        """
        return self.frame

    def verdicts(self) -> pd.Series:
        """How often each verdict was given."""
        return self.frame["verdict"].value_counts()

    def headline(self) -> str:
        found = ", ".join(f"{n} {v}" for v, n in self.verdicts().items())
        return f"adequacy of one chain, {self.customers:,} customers, {self.horizon} periods ahead: {found}"

    def about(self) -> Mapping[str, Any]:
        return {
            "horizon": self.horizon,
            "level": self.level,
            "replications": self.replications,
            "outlook": self.outlook.to_dict(orient="records"),
        }


def adequacy(
    tally: Tally,
    *,
    horizon: int = 12,
    rng: int | np.random.Generator = 1,
    level: float = 0.90,
    replications: int = 199,
    by: str | None = None,
    joiners: str = "constant",
    effects: bool = True,
    options: Mapping[str, Mapping[str, Any]] | None = None,
) -> Adequacy:
    """Test what a plain chain assumes, and say what each failure does to the forecast.

    Parameters
    ----------
    tally : Tally
    horizon : periods ahead at which effects are measured
    level : of the band that an effect is held against
    replications : random tables, permutations and simulated panels behind each p-value
    by : a segment column: test each of its values as well
    joiners : method of the joiner forecast in that band ("planned" is taken as "last_year")
    effects : False leaves the effects unknown (NaN), so that nothing gets worse than "doubtful"
    options : model -> options of `fit` for the repairing models

    Raises CallError for unusable arguments. What these counts cannot tell is "not_testable", with the reason.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> moves = [(t, "steady", to, n) for t in range(10) for to, n in (("steady", 95), ("left", 5))]
    >>> found = adequacy(cf.read_counts(moves, states, period="step"), horizon=3, replications=99).to_frame()
    >>> found.loc[found["check"] == "drift", ["statistic", "df", "p_value", "verdict"]].to_dict("records")[0]
    {'statistic': 0.0, 'df': 9.0, 'p_value': 1.0, 'verdict': 'holds'}
    """
    if replications < 19:
        raise CallError(f"replications is at least 19, or no p-value can be below .05; got {replications}.")
    if horizon < 1:
        raise CallError(f"horizon is a number of periods from 1 on; got {horizon}.")
    random = rng if isinstance(rng, np.random.Generator) else np.random.default_rng(rng)
    setting = Setting(horizon, level, joiners=known_method(joiners), options=options)
    parts = {"all": tally} if by is None else {"all": tally, **tally.by_segment(by)}
    rows, outlooks, gaps = [], [], []
    for name, part in parts.items():
        found, gap = _findings(part, replications, random)
        effect = Effects.of(part, setting, random) if effects else Effects.unknown(part, setting)
        rows += [_row(name, f, effect, effects) for f in found]
        outlooks.append((name, effect.live, effect.half_width))
        gaps.append(gap.assign(segment=name))
    frame = pd.DataFrame(rows, columns=list(COLUMNS))
    outlook = pd.DataFrame(outlooks, columns=["segment", "all_live", "half_width"])
    gap_frame = pd.concat(gaps, ignore_index=True)
    gap_frame.insert(0, "segment", gap_frame.pop("segment"))
    return Adequacy(frame, outlook, gap_frame, horizon, level, replications, tally.meta.customers)


def _findings(
    tally: Tally, replications: int, rng: np.random.Generator
) -> tuple[list[Finding], pd.DataFrame]:
    n = replications
    has_paths = "paths" in tally.meta.tables
    paths = Paths.of(tally) if has_paths else None
    some = Paths.of(tally, most=SIMULATED, rng=rng) if has_paths else None
    steps, gaps = k_steps(tally.states, some, replications=n, rng=rng)
    found = [
        order(tally, replications=n, rng=rng),
        periods_alike(tally, replications=n, rng=rng),
        eras_alike(tally, replications=n, rng=rng),
        seasons_alike(tally, replications=n, rng=rng),
        *segments(tally, paths, replications=n, rng=rng),
        duration(tally, "tenure", replications=n, rng=rng),
        duration(tally, "time_in_state", replications=n, rng=rng),
        customers(tally, paths),
        *steps,
    ]
    return found, gaps


def _row(segment: str, finding: Finding, effects: Effects, wanted: bool) -> tuple[Any, ...]:
    testable = not np.isnan(finding.p_value)
    effect = effects.of_finding(finding) if wanted and testable else np.nan
    said = verdict(finding, effect, effects.yardstick(finding))
    advice = {"holds": "", "not_testable": finding.reason}.get(said, finding.repair)
    numbers = (finding.statistic, float(finding.df), finding.p_value, effect)
    return (segment, finding.check, finding.what, *numbers, said, advice)
