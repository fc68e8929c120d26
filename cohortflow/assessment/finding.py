"""One check of one assumption: what was compared, how surprising it is, what repairs it; and the verdict."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

VERDICTS = ("holds", "doubtful", "fails", "not_testable")
SURPRISING = 0.05  # above it nothing is said against the assumption
CLEAR = 0.01  # at or below it the verdict may be "fails", if the effect matters
MATTERS = 0.5  # ... which is this share of the band's half-width


@dataclass(frozen=True)
class Finding:
    """A row of the table `adequacy` before the effect is known.

    check : order | drift | seasons | segments | tenure | time_in_state | customers | k_steps
    what : code of what was compared ("previous_state", "eras", the segment's column, "k=6" ...)
    statistic, df, p_value : NaN where the check could not be made (or, for df, where there is none)
    repair : the model that drops the assumption; "common_shocks" names the part of the band that covers it
    option : what that model needs, for instance the segment's column
    reason : code, why the check could not be made
    floor : the smallest p-value that it could have given (1 / (draws + 1) for Monte Carlo)
    """

    check: str
    what: str
    repair: str
    statistic: float = np.nan
    df: float = np.nan
    p_value: float = np.nan
    option: str = ""
    reason: str = ""
    floor: float = 0.0


def verdict(finding: Finding, effect: float, half_width: float) -> str:
    """holds | doubtful | fails | not_testable.

    effect : customers by which the repairing model moves `all_live` at the horizon (NaN: not known)
    half_width : half the width of the band of `all_live` there

    fails: clear, and the effect is at least half of that half-width; doubtful: surprising, but small,
    borderline or of unknown effect.

    >>> found = Finding("order", "previous_state", "second_order", p_value=0.001)
    >>> verdict(found, effect=-40.0, half_width=60.0), verdict(found, effect=-4.0, half_width=60.0)
    ('fails', 'doubtful')
    """
    if np.isnan(finding.p_value):
        return "not_testable"
    if finding.p_value > SURPRISING:
        return "holds"
    clear = finding.p_value <= max(CLEAR, finding.floor)
    return "fails" if clear and abs(effect) >= MATTERS * half_width else "doubtful"
