"""What `draft` prints: the files, the columns, and the names with their place in the histories."""

from __future__ import annotations

from collections.abc import Sequence

from cohortflow.history.profile import Profile
from cohortflow.report.rounding import percent
from cohortflow.report.table import WIDTH, Table, plain_text
from cohortflow.report.text import clean, listing, wrap

KINDS = {"instant": "date or time", "period": "period", "number": "number", "text": "text", "empty": "empty"}


def profile_text(found: Profile, exits: Sequence[str]) -> str:
    """Findings of a first look, at most 80 columns wide."""
    parts = [_lead(found, exits), plain_text(_columns(found)), plain_text(_names(found))]
    return "\n\n".join(parts) + "\n"


def _lead(found: Profile, exits: Sequence[str]) -> str:
    who = f" of {found.customers:,} customers" if found.customers else ""
    lines = [f"{found.rows:,} rows{who}; it looks like the layout {found.layout}."]
    if found.when:
        lines.append(f"It covers {found.when.first} to {found.when.last}.")
    if found.unsplit:
        lines.append(f"{found.unsplit:,} records do not fit the header line.")
    named = [f'"{name}"' for name in exits]
    said = f"Mostly nothing follows {listing(named)}: confirm in the study whether that means having left."
    lines.append(
        said if exits else "No name looks like having left; the study has no exit until you set one."
    )
    return "\n".join(line for text in lines for line in wrap(clean(text), WIDTH))


def _columns(found: Profile) -> Table:
    roles = {name: role for role, name in found.roles.items()}
    rows = tuple(
        (c.name, roles.get(c.name, ""), KINDS[c.kind], f"{c.filled:,}", f"{c.different:,}")
        for c in found.columns
    )
    return Table("Columns", ("column", "used as", "holds", "filled", "different"), rows, texts=(0, 1, 2))


def _names(found: Profile) -> Table:
    what = "event" if found.layout == "events" else "state"
    if found.layout == "counts":
        return Table("States", ("state",), tuple((n.name,) for n in found.names))
    rows = tuple(
        (n.name, f"{n.rows:,}", f"{n.customers:,}", percent(n.begins), percent(n.ends) if n.of else "")
        for n in found.names
    )
    heads = (what, "rows", "customers", "first row", "nothing after")
    return Table(f"{what.capitalize()}s", heads, rows)
