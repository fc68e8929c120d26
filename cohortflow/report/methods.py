"""What a forecast rests on, how its states are defined, and the methods and sources behind each figure."""

from __future__ import annotations

from cohortflow.report.content import Facts, Section
from cohortflow.report.rounding import count, percent
from cohortflow.report.table import Table
from cohortflow.report.text import clean, listing
from cohortflow.report.wording import JOINERS, MODELS, SOURCES, said

ROLES = {
    "live": "live",
    "entry": "live, where joiners start",
    "away": "away: may come back",
    "exit": "an exit",
}


def assumptions(facts: Facts) -> tuple[str, ...]:
    """What must hold for the projection to mean anything, in the order of importance."""
    window = f" ({facts.first} to {facts.last})" if facts.first else ""
    out = [
        f"Rates: {MODELS.get(facts.model, said(facts.model))}; the future moves as the periods counted did{window}.",
        f"Joiners: {JOINERS.get(facts.joiners, said(facts.joiners))}.",
    ]
    if facts.model == "plain":
        out.append(
            "Where a customer goes next depends on the state now, not on the way there or on the time spent; customers "
            "in one state are alike; they move independently of one another."
        )
    if facts.excluded:
        out.append(f"Left out of the rates: {listing(list(facts.excluded), limit=12)}.")
    return tuple(out)


def states_table(facts: Facts) -> Table:
    """Each state with its role and, where known, its rule."""
    rules = any(facts.rules.get(n) for n in facts.states.names)
    heads = ("state", "counts as", "rule (the first that holds)") if rules else ("state", "counts as")
    rows = [(clean(n), ROLES[facts.states.role(n)], *([facts.rules.get(n, "")] if rules else []))
            for n in facts.states.names]  # fmt: skip
    return Table("The states", heads, tuple(rows), texts=(0, 1, 2))


def methods_section(facts: Facts) -> Section:
    """Sources of the methods and whatever is needed to make this report again."""
    terms = [(what, source, "") for what, source in SOURCES]
    terms += [("Input", f"{clean(name)}, {count(size)} bytes{f', {count(rows)} rows' if rows is not None else ''}",
               f"SHA-256 {digest}") for name, size, rows, digest in facts.inputs]  # fmt: skip
    settings = [f"{clean(k)} = {clean(v)}" for k, v in facts.settings.items()]
    if settings:
        terms.append(("Settings", "; ".join(settings), ""))
    signed = [f"{said(k)}: {clean(v)}" for k, v in facts.people.items() if v]
    if signed:
        terms.append(("People", "; ".join(signed), ""))
    made = f"cohortflow {facts.version}" if facts.version else "cohortflow"
    seed = f", seed {facts.seed}" if facts.seed is not None else ""
    terms.append(("Made with", f"{made}, level {percent(facts.level, 0)}{seed}", ""))
    return Section("methods", "Methods and sources", terms=tuple(terms))
