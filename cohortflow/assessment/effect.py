"""What a failed assumption does to the forecast: the model that drops it, projected beside the plain chain.

effect = all_live at the horizon under the repairing model, less that under the plain chain (customers)

For "common_shocks" the mean does not move; its effect is the growth of the band's half-width.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.outlook import Setting, SharedLuck, coming, expected_live, outlook
from cohortflow.errors import CohortflowError
from cohortflow.estimator.fit import Fit
from cohortflow.estimator.variants import MODELS
from cohortflow.projector import Joiners, Projection
from cohortflow.tally import Tally


@dataclass(frozen=True, eq=False)
class Effects:
    """The plain chain's forecast of one tally, and the repaired ones as they are asked for.

    live : expected `all_live` at the horizon;  half_width : half the width of its band there
    calm : the same half-width without common shocks
    """

    tally: Tally
    setting: Setting
    joiners: Joiners | None
    live: float
    half_width: float
    calm: float
    known: dict[tuple[str, str], float] = field(default_factory=dict)

    @classmethod
    def of(cls, tally: Tally, setting: Setting, rng: np.random.Generator) -> Effects:
        """NaN throughout when the plain chain cannot be projected."""
        try:
            fitted = setting.fit(tally, "plain")
            joiners = coming(tally, setting)
            calm = _half_width(outlook(fitted, setting, joiners=joiners, rng=rng))
            wide = _shocked_half_width(fitted, setting, joiners, rng)
            live = expected_live(fitted, setting, joiners)
        except CohortflowError:
            return cls.unknown(tally, setting)
        return cls(tally, setting, joiners, live, calm if np.isnan(wide) else wide, calm)

    @classmethod
    def unknown(cls, tally: Tally, setting: Setting) -> Effects:
        """No forecast, so no effects."""
        return cls(tally, setting, None, np.nan, np.nan, np.nan)

    def of_finding(self, finding: Finding) -> float:
        """Effect of dropping the assumption; NaN where these counts do not allow the repairing model."""
        if finding.repair == "common_shocks":
            return self.half_width - self.calm
        key = (finding.repair, finding.option)
        if key not in self.known:
            self.known[key] = self._moved(*key)
        return self.known[key]

    def yardstick(self, finding: Finding) -> float:
        """The half-width that the effect is held against."""
        return self.calm if finding.repair == "common_shocks" else self.half_width

    def _moved(self, model: str, option: str) -> float:
        if model not in MODELS:
            return np.nan
        try:
            fitted = self.setting.fit(self.tally, model, **({"by": option} if option else {}))
            return expected_live(fitted, self.setting, self.joiners) - self.live
        except CohortflowError:
            return np.nan


def _half_width(projection: Projection) -> float:
    tails = [(1 - projection.level) / 2, (1 + projection.level) / 2]
    low, high = np.quantile(projection.paths("all_live")[:, -1], tails)
    return float(high - low) / 2


def _shocked_half_width(
    fitted: Fit, setting: Setting, joiners: Joiners | None, rng: np.random.Generator
) -> float:
    shocks = SharedLuck().draws(fitted, setting, rng)
    if shocks is None:
        return np.nan
    return _half_width(outlook(fitted, setting, joiners=joiners, rng=rng, shocks=shocks))
