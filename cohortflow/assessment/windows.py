"""Exits by silence: how long to wait before calling it leaving.

For a window of w silent periods, the silences that reached it are followed on: what share ended in a later `of`
event? Too short a window calls customers gone who come back; the window itself is how late the news is.

With R(l) silences at risk of ending after l >= w silent periods, d1(l) ended by an event and d2(l) otherwise
(another exit, or the rule's other conditions ceased to hold),

    S(w) = 1,   F += S(l) d1(l) / R(l),   S(l+1) = S(l) (1 - (d1(l) + d2(l)) / R(l))

silences still open on the last day being censored (Aalen and Johansen 1978; 1 - Kaplan-Meier when nothing ends
otherwise). Variance by the recursion C <- T'CT + S^2 (diag q - q q') / R; limits on the scale log(-log(1 - F)); Wilson
limits with n = silences at risk at w where F is 0 or 1. The share is that seen within the extract: what would come back
after its end is not in it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from scipy import stats

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.interval import wilson
from cohortflow.record import Record
from cohortflow.tally import SILENCE_ENDS, Tally

OPEN, EVENT, OTHERWISE = (SILENCE_ENDS.index(e) for e in ("as_of", "event", "otherwise"))
COLUMNS = ("exit", "window", "share_later_returning", "low", "high", "reporting_delay")


@dataclass(frozen=True, repr=False, eq=False)
class Windows(Record):
    """exit, window, share_later_returning, low, high, reporting_delay (periods), one row an exit and window.

    reached : silences that reached the window, in the order of the rows
    """

    frame: pd.DataFrame
    reached: tuple[int, ...]
    level: float
    kind: ClassVar[str] = "windows"

    def to_frame(self) -> pd.DataFrame:
        """The contract's table `windows`."""
        return self.frame.copy()

    def headline(self) -> str:
        return f"{self.frame['exit'].nunique()} exits by silence, windows up to {self.frame['window'].max()} periods"

    def about(self) -> Mapping[str, Any]:
        return {"level": self.level, "limits": "log-log", "reached": list(self.reached)}


def silence_windows(tally: Tally, longest: Mapping[str, int], *, level: float = 0.90) -> Windows:
    """The share of silences that later end in an event, by the window after which they count as an exit.

    longest : exit by silence -> the longest window to show (runs show 1 .. 2k, k being the study's)

    Share and limits are NaN for windows that no silence reached with a further period to be seen. NotIdentified when
    the source told no silences.

    >>> import cohortflow as cf
    >>> log = [("a", "2026-01-05"), ("a", "2026-03-05"), ("b", "2026-01-09"), ("c", "2026-01-20"), ("c", "2026-02-11")]
    >>> log = pd.DataFrame([(who, at, "bought") for who, at in log], columns=["customer", "time", "event"])
    >>> rules = [{"name": "left", "role": "exit", "when": {"silent_for": 2, "of": ["bought"]}}, {"name": "buying"}]
    >>> tally = cf.count(cf.read_events(log, rules, as_of="2026-04-30", joins=["bought"]))
    >>> found = silence_windows(tally, {"left": 2})
    >>> found.to_frame()["share_later_returning"].tolist(), found.reached
    ([0.333..., 0.0], (4, 2))
    """
    silences = tally.table("silences")
    known = tally.states.exits
    for name, most in longest.items():
        if name not in known or most < 1:
            raise CallError(f'Windows are for exits, of at least one period; got "{name}": {most}.')
    if not longest:
        raise NotIdentified("No exit of the study asks for silence, so there is no window to judge.")
    rows, reached = [], []
    for name, most in longest.items():
        mine = silences[silences["state"] == tally.states.index(name)]
        for window in range(1, most + 1):
            spells = mine[(mine["entered"] <= window) & (mine["length"] >= window)]
            share, low, high = later_returning(spells, window, level)
            rows.append((name, window, share, low, high, window))
            reached.append(int(spells["n"].sum()))
    return Windows(pd.DataFrame(rows, columns=list(COLUMNS)), tuple(reached), level)


def later_returning(spells: pd.DataFrame, window: int, level: float) -> tuple[float, float, float]:
    """Share of silences (length, ended, n) that reached the window and later ended in an event, with limits.

    >>> spells = pd.DataFrame({"length": [1, 2, 3], "ended": [1, 1, 0], "n": [6, 1, 3]})
    >>> round(later_returning(spells, 1, 0.9)[0], 3)  # 6/10 after one period, then 1/4 of the rest
    0.7
    """
    longest = int(spells["length"].max()) if len(spells) else window
    ends = np.zeros((3, longest - window + 1), dtype=np.int64)
    np.add.at(
        ends, (spells["ended"].to_numpy(), spells["length"].to_numpy() - window), spells["n"].to_numpy()
    )
    at_risk = ends.sum(axis=0)[::-1].cumsum()[::-1] - ends[OPEN]
    if at_risk[0] == 0:
        return np.nan, np.nan, np.nan
    law, spread = np.array([1.0, 0.0, 0.0]), np.zeros((3, 3))
    for risk, event, other in zip(at_risk, ends[EVENT], ends[OTHERWISE], strict=True):
        if risk == 0:
            break
        step = np.array([1 - (event + other) / risk, event / risk, other / risk])
        chances = np.eye(3)
        chances[0] = step
        spread = chances.T @ spread @ chances + law[0] ** 2 * (np.diag(step) - np.outer(step, step)) / risk
        law = law @ chances
    return float(law[1]), *_limits(float(law[1]), float(spread[1, 1]), int(at_risk[0]), level)


def _limits(share: float, variance: float, at_risk: int, level: float) -> tuple[float, float]:
    if share <= 0.0 or share >= 1.0 or variance <= 0.0:
        low, high = wilson(round(share * at_risk), at_risk, level=level)
        return float(low), float(high)
    rest = 1.0 - share
    half = stats.norm.ppf((1 + level) / 2) * np.sqrt(variance) / (rest * abs(np.log(rest)))
    centre = np.log(-np.log(rest))
    return float(-np.expm1(-np.exp(centre - half))), float(-np.expm1(-np.exp(centre + half)))
