"""What a reader must know before believing the numbers: findings, and parts of the study not used yet."""

from __future__ import annotations

from collections.abc import Iterable

from cohortflow.estimator import Fit
from cohortflow.study import Study

UNUSED = {
    "value": "[value]: money by state and move",
    "scenarios": "[[scenario]]: what-ifs",
    "adjustments": "[[adjustment]]: manual overlays",
    "budget": "[budget]: the comparison with the budget",
}


def fit_findings(fitted: Fit) -> list[str]:
    """Codes of the fit's notes that spoil a number, segments as "note@segment"."""
    found = [note for note in fitted.notes]
    for segment, part in fitted.segments.items():
        found += [f"{note}@{segment}" for note in part.notes]
    return found


def not_yet(study: Study, used: Iterable[str] = ()) -> list[str]:
    """Sentences on tables of the study that were read and checked but have no effect yet."""
    return [
        f"{what} is read and checked, but not used by this version yet."
        for key, what in UNUSED.items()
        if getattr(study, key) and key not in used
    ]
