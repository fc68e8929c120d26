"""The text of a starter study: what the profile shows, and what a person must confirm, marked CONFIRM.

States are the user's own events or states. An exit is never set: candidates, after which nothing follows, stand
as a comment to uncomment.
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date

from cohortflow.history.guess import MOST_GROUPS, Column
from cohortflow.history.labels import period_of_label
from cohortflow.history.profile import Profile
from cohortflow.periods import Calendar
from cohortflow.runs.draft_states import (
    CONFIRM,
    EventPlan,
    first_share,
    listing,
    may_begin,
    plain_states,
    quoted,
)

HORIZON = {"day": 28, "week": 13, "month": 12, "quarter": 4, "year": 3, "step": 12}


def draft_text(found: Profile, *, files: Sequence[str], title: str) -> str:
    """The starter study of a profile; `files` as the study is to name them."""
    blocks = [_head(found), _study(found, title), _input(found, files)]
    if found.layout == "events":
        plan = EventPlan(found.names)
        blocks += [plan.events(), *plan.states(found.period)]
    else:
        blocks += plain_states(found)
    return "\n\n".join("\n".join(lines) for lines in blocks if lines) + "\n"


# ---- [study] and [input] ----
def _head(found: Profile) -> list[str]:
    lines = [
        "# A starter study, drafted from the extract. Lines that say CONFIRM hold what only you can know:",
        "# read them, change or uncomment what is needed, then run `cohortflow check` on this file.",
        f"# Seen: {found.rows:,} rows" + (f" of {found.customers:,} customers." if found.customers else "."),
    ]
    lines += [
        f"#   {quoted(name)}: {rows:,} rows, {size:,} bytes, {shown}"
        for name, size, rows, shown in found.files
    ]
    if found.unsplit:
        lines.append(f"#   {found.unsplit:,} records do not fit the header line; they will be rejected.")
    return lines


def _study(found: Profile, title: str) -> list[str]:
    lines = ["[study]", f"title = {quoted(title)}"]
    lines.append(
        f'period = "{found.period}"'
        + (f"   # {CONFIRM}: the step of the forecast" * (found.layout == "events"))
    )
    if found.period != "step":
        lines += _as_of(found)
    horizon = HORIZON[found.period]
    return [
        *lines,
        f"horizon = {horizon}   # periods ahead",
        "level = 0.90   # of every interval",
        "seed = 1",
    ]


def _as_of(found: Profile) -> list[str]:
    when, calendar = found.when, Calendar(found.period)
    trusted = f"{CONFIRM}: the last day the extract can be trusted"
    if when is None or when.kind != "instant":
        labels = found.periods if when is None else (when.last,)
        read = [period_of_label(label, calendar) for label in labels]
        day = calendar.end(max(p for p in read if p is not None))
        return [f'as_of = "{day}"   # {trusted}: the end of its last period']
    day = date.fromisoformat(when.last)
    if found.layout in ("history", "counts"):
        day = calendar.end(calendar.ordinal(day))
    lines = [f'as_of = "{day}"   # {trusted}; later rows are set aside']
    if when.after or when.before:
        lines.append(
            f"# Few rows beside the rest: {when.before:,} before {when.first}, {when.after:,} after it."
        )
    return lines


def _input(found: Profile, files: Sequence[str]) -> list[str]:
    lines = ["[input]", f'layout = "{found.layout}"   # {CONFIRM}: events, history, wide, spells or counts']
    lines.append(f"files = {listing(files)}")
    for role in ("customer", "time", "end", "event", "state", "from", "to", "n", "event_id"):
        if role in found.roles:
            lines.append(f"{role} = {quoted(found.roles[role])}{_about(found, role)}")
    lines += _writing(found)
    if found.layout == "wide":
        lines.append(f"# periods: the columns {quoted(found.periods[0])} to {quoted(found.periods[-1])}")
    if found.layout in ("events", "history", "spells"):
        lines += _spare(found)
    if found.layout == "events":
        lines += _ends_of_log(found)
    if found.layout in ("history", "wide"):
        lines += _absent(found)
    if found.layout == "spells":
        lines += _reasons(found)
    return lines


def _about(found: Profile, role: str) -> str:
    column = found.column(role)
    if column is None:
        return ""
    missing = found.rows - column.filled
    notes = [f"{missing:,} blank"] if missing and role != "end" else []
    if role == "customer":
        notes.insert(0, f"{found.customers:,} different")
    if role == "time" and found.when and found.when.unreadable > missing:
        notes.append(f"{found.when.unreadable:,} unreadable or blank")
    return f"   # {CONFIRM}: " + ", ".join(notes) if notes else ""


def _writing(found: Profile) -> list[str]:
    lines = []
    when = found.when
    if when and when.date_format:
        lines.append(f"date_format = {quoted(when.date_format)}")
    if when and when.zoned:
        lines.append(
            f'timezone = "UTC"   # {CONFIRM}: the instants carry offsets; name the zone whose days count'
        )
    if found.delimiter not in (",", "\t"):
        lines.append(f"delimiter = {quoted(found.delimiter)}")
    if found.encoding not in ("utf-8", "utf-8-sig"):
        lines.append(f"encoding = {quoted(found.encoding)}   # {CONFIRM}")
    if found.decimal == ",":
        lines.append('decimal = ","')
    return lines


def _spare(found: Profile) -> list[str]:
    money = [c for c in found.spare if c.money or (c.kind == "number" and c.hint("amount"))]
    groups = [c for c in found.spare if _groups(c)]
    until = [c for c in found.spare if c.kind == "instant" and c.hint("valid_until")]
    lines = [f"# amount = {quoted(c.name)}   # {CONFIRM}: money, {c.filled:,} values" for c in money[:1]]
    lines += [f"# more money: {quoted(c.name)}" for c in money[1:]]
    if groups:
        lines.append(
            f"# segments = {listing([c.name for c in groups])}   # {CONFIRM}: few values, steady for a customer"
        )
    if until and found.layout == "events":
        lines.append(f"# valid_until = {quoted(until[0].name)}   # {CONFIRM}: the paid-up-to day")
    return lines


def _groups(c: Column) -> bool:
    return c.kind == "text" and 2 <= len(c.names) <= MOST_GROUPS and (c.constant or 0) >= 0.9


def _ends_of_log(found: Profile) -> list[str]:
    starts = [n for n in found.names if may_begin(n)]
    lines = []
    if starts:
        shares = ", ".join(f"{quoted(n.name)}: {first_share(n)}" for n in starts)
        lines.append(f"# joins = {listing([n.name for n in starts])}   # {CONFIRM}: {shares}")
    if found.when and found.when.kind == "instant":
        lines.append(
            f'# log_start = "{found.when.first}"   # {CONFIRM}: the first day from which the log is complete'
        )
    return lines


def _absent(found: Profile) -> list[str]:
    return [
        f"# {found.stopped:,} of {found.customers:,} customers have no row in the last period. If no row means that",
        f"# they left, name the exit here, and uncomment or add its [[state]] below ({CONFIRM}):",
        '# on_absent = "no row"',
    ]


def _reasons(found: Profile) -> list[str]:
    few = [c for c in found.spare if c.kind == "text" and c.names and c.filled < found.rows]
    lines = [
        f"# end_reason = {quoted(c.name)}   # {CONFIRM}: its values are then exits; add a [[state]] for each"
        for c in few[:1]
    ]
    told = f"# What the end of a customer's last spell means ({CONFIRM}): name the exit here, its [[state]] below."
    return [*lines, told, '# on_absent = "no row"']
