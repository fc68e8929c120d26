"""What a reader must know before believing the numbers: findings, and parts of the study not used yet."""

from __future__ import annotations

from collections.abc import Iterable

from cohortflow.estimator import Fit
from cohortflow.history import Finding
from cohortflow.study import Study

HINTS = ("few_at_risk", "no_buckets")
UNUSED = {
    "scenarios": "[[scenario]]",
    "budget": "[budget]",
}


def fit_findings(fitted: Fit) -> tuple[Finding, ...]:
    """The fit's notes ("no_data:quiet") as findings; those that only widen an interval are not serious."""
    return tuple(
        _finding(note, segment)
        for segment, part in {"all": fitted, **fitted.segments}.items()
        for note in part.notes
    )


def _finding(note: str, segment: str) -> Finding:
    code, _, state = note.partition(":")
    detail = {"state": state} if state else {}
    if segment != "all":
        detail["segment"] = segment
    return Finding(code, serious=code not in HINTS, detail=detail)


def not_yet(study: Study, used: Iterable[str] = ()) -> list[str]:
    """Sentences on tables of the study that were read and checked but have no effect yet."""
    return [
        f"{table} was read and checked, but this version does not use it yet."
        for key, table in UNUSED.items()
        if getattr(study, key) and key not in used
    ]
