"""What the report needs to know about a run beside its tables."""

from __future__ import annotations

from typing import TYPE_CHECKING

from cohortflow import __version__
from cohortflow.history import Finding
from cohortflow.report.content import Facts
from cohortflow.report.rule_words import rules_in_words
from cohortflow.study import Study

if TYPE_CHECKING:
    from cohortflow.runs.folder import Run


def facts_of(done: Run) -> Facts:
    """Facts of a run whose forecasts were made."""
    study, forecast = done.study, done.forecasts["all"]
    fitted, tally = forecast.fit, forecast.fit.tally
    label = study.calendar.label
    return Facts(
        title=study.title,
        states=study.states,
        calendar=study.calendar,
        level=study.level,
        horizon=study.horizon,
        first=label(tally.meta.first),
        last=label(tally.meta.last),
        as_of=study.as_of.isoformat() if study.as_of else "",
        seed=study.seed,
        model=fitted.model,
        joiners=forecast.joiners.method,
        customers=tally.meta.customers,
        moves=int(tally.counts().sum()),
        totals=study.totals,
        excluded=tuple(label(p) for p in study.model.exclude),
        notes=tuple(note_of(f) for f in done.findings) + (*forecast.projection.reasons,),
        verdict=forecast.long_run.verdict,
        reasons=forecast.long_run.reasons,
        parts=forecast.projection.parts,
        rules=rules_in_words(study.rules, study.calendar.kind) if study.input.layout == "events" else {},
        inputs=tuple((f.name, f.bytes, f.rows, f.sha256) for f in done.inputs),
        settings=changed_settings(study),
        people={"prepared_by": study.people.prepared_by, "checked_by": study.people.checked_by,
                "approved_by": study.people.approved_by},
        absent=done.absent,
        version=__version__,
    )  # fmt: skip


def note_of(finding: Finding) -> str:
    """A finding as a code for the report: "few_at_risk:quiet", in a segment "few_at_risk:quiet@web"."""
    state, segment = finding.detail.get("state", ""), finding.detail.get("segment", "")
    return finding.code + (f":{state}" if state else "") + (f"@{segment}" if segment else "")


def changed_settings(study: Study) -> dict[str, str]:
    """Settings that came from an option or the environment: key -> "by option"."""
    outside = ("option", "environment")
    return {key: f"by {origin}" for key, origin in study.origin_of.items() if origin in outside}
