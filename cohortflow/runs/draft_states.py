"""The states of a starter study: the extract's own events or states, exits only as proposals to confirm."""

from __future__ import annotations

import difflib
import json
from collections.abc import Sequence

from cohortflow.history.places import Name
from cohortflow.history.profile import Profile

CONFIRM = "CONFIRM"
MOST_STATES = 12
RARE = 0.001  # share of the rows below which an event gets no state of its own
ENDS = 0.5  # share of an event's rows with nothing after them from which it may mean leaving
BEGINS = 0.8  # share of an event's rows that are a customer's first from which it may mark joining
FEWEST = 5
LIKE, FEW_BESIDE = (
    0.75,
    0.05,
)  # likeness of names, and share of the other's rows, of a possible slip of spelling


def quoted(text: str) -> str:
    """A text as TOML writes it; also used in comments, where a line break would end them.

    >>> print(quoted('say "ah"'), quoted("two\\nlines"))
    "say \\"ah\\"" "two\\nlines"
    """
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def listing(texts: Sequence[str]) -> str:
    """A TOML list of texts."""
    return "[" + ", ".join(map(quoted, texts)) + "]"


def possible_exits(found: Profile) -> tuple[str, ...]:
    """Names after which customers mostly do not come again."""
    if found.layout == "counts":
        return tuple(n.name for n in found.names if not n.leaves)
    return tuple(n.name for n in found.names if may_end(n))


def may_end(n: Name) -> bool:
    """Whether an event or state may mean leaving: mostly nothing follows it."""
    return n.of >= FEWEST and n.ends >= ENDS


def may_begin(n: Name) -> bool:
    """Whether an event may mark joining: nearly all of its rows are a customer's first."""
    return n.rows >= FEWEST and n.begins >= BEGINS and not may_end(n)


class EventPlan:
    """Which events become states, which are other spellings, which are too rare."""

    def __init__(self, names: Sequence[Name]) -> None:
        rows = sum(n.rows for n in names)
        self.map: dict[str, list[str]] = {}
        self.ignored: list[Name] = []
        kept: list[Name] = []
        for n in names:
            same = next((k for k in kept if _folded(k.name) == _folded(n.name)), None)
            if same is not None:
                self.map.setdefault(same.name, []).append(n.name)
            elif n.rows < RARE * rows and not may_end(n):
                self.ignored.append(n)
            else:
                kept.append(n)
        self.kept = kept
        lasting = [n for n in kept if not may_end(n)]
        self.other = (lasting or kept)[0]
        self.own = [n for n in kept if n is not self.other and (may_end(n) or n in lasting[:MOST_STATES])]

    def events(self) -> list[str]:
        """[events]: spellings that differ only in case or outer spaces, and rare events."""
        lines = []
        if self.map:
            pairs = ", ".join(f"{quoted(name)} = {listing(spelt)}" for name, spelt in self.map.items())
            lines.append(f"map = {{ {pairs} }}   # {CONFIRM}: they differ only in case or spaces")
        if self.ignored:
            lines.append(
                f"ignore = {listing([n.name for n in self.ignored])}   # {CONFIRM}: rare, so without a state"
            )
            lines += [self._hint(n) for n in self.ignored if self._like(n)]
        return ["[events]", *lines] if lines else []

    def states(self, period: str) -> list[list[str]]:
        """A state for each event: whose latest event it is."""
        intro = [
            "# The states: here simply the latest event of each customer, a first guess to improve. They are read from",
            "# the top, the first that holds counts, and the last takes everybody else. role: exit (left), away,",
            "# entry (where joiners start) or live (left out).",
        ]
        if not any(may_end(n) for n in self.kept):
            intro.append(
                f"# {CONFIRM}: no event looks like leaving (something nearly always follows). Without an exit no"
            )
            intro.append("# churn is estimated; silence may be the sign of it, see below.")
        among = listing([n.name for n in self.kept])
        ends = [self._state(n, among) for n in self.own if may_end(n)]
        lasting = [self._state(n, among) for n in self.own if not may_end(n)]
        return [intro, *ends, *self._silence(period), *lasting, self._last()]

    def _state(self, n: Name, among: str) -> list[str]:
        lines = ["[[state]]", f"name = {quoted(n.name)}"]
        if may_end(n):
            lines.append(f'# role = "exit"   # {CONFIRM}: {_why(n)}')
        elif may_begin(n):
            lines.append(f'# role = "entry"   # {CONFIRM}: {first_share(n)}; uncomment if joiners start here')
        if self._like(n):
            lines.append(self._hint(n))
        return [*lines, f"when = {{ last_event = {listing([n.name])}, among = {among} }}"]

    def _last(self) -> list[str]:
        more = [n.name for n in self.kept if n is not self.other and n not in self.own]
        lines = ["[[state]]", f"name = {quoted(self.other.name)}   # everybody else"]
        if may_end(self.other):
            lines.append(
                f"# {CONFIRM}: {_why(self.other)}; give it a `when` and put a live state after it if so."
            )
        return [*lines, *([f"# among them the latest events {listing(more)}"] if more else [])]

    def _silence(self, period: str) -> list[list[str]]:
        again = max((n for n in self.kept if n.gap and not may_end(n)), key=lambda n: n.rows, default=None)
        if again is None:
            return []
        named = f"no {again.name} for {again.gap} {period}{'s' if again.gap > 1 else ''}"
        lines = [
            f"{CONFIRM}: leaving may also show as silence. 95 % of the gaps between two {period}s with",
            f"{quoted(again.name)} are at most {again.gap}; uncomment if a longer one means having left.",
            "[[state]]",
            f"name = {quoted(named)}",
            'role = "exit"',
            f"when = {{ silent_for = {again.gap}, of = {listing([again.name])} }}",
        ]
        return [[f"# {line}" for line in lines]]

    def _like(self, n: Name) -> str:
        others = {_folded(k.name): k.name for k in self.kept if k is not n and n.rows < FEW_BESIDE * k.rows}
        close = difflib.get_close_matches(_folded(n.name), others, n=1, cutoff=LIKE)
        return others[close[0]] if close else ""

    def _hint(self, n: Name) -> str:
        slip = f"is {quoted(n.name)} ({n.rows:,} rows) another spelling of {quoted(self._like(n))}?"
        return f"# {CONFIRM}: {slip} Then it belongs in [events] map."


def _why(n: Name) -> str:
    return f"nothing follows it in {n.ends:.0%} of {n.of:,} cases; uncomment if it means having left"


def first_share(n: Name) -> str:
    """How often an event is a customer's first row."""
    return f"the customer's first row in {n.begins:.0%} of {n.rows:,} cases"


def _folded(name: str) -> str:
    return " ".join(name.casefold().split())


def plain_states(found: Profile) -> list[list[str]]:
    """The [[state]] blocks of layouts whose rows carry the state."""
    exits = possible_exits(found)
    ordered = sorted(found.names, key=lambda n: n.name in exits)
    blocks = []
    if not exits:
        blocks.append(
            [f"# {CONFIRM}: no state looks like having left; without an exit no churn is estimated."]
        )
    for n in ordered:
        lines = ["[[state]]", f"name = {quoted(n.name)}"]
        if n.name in exits:
            why = "no move leaves it" if found.layout == "counts" else _why(n)
            lines.append(f'# role = "exit"   # {CONFIRM}: {why}')
        blocks.append(lines)
    if found.layout != "counts":
        blocks.append(
            [
                "# [[state]]",
                '# name = "no row"   # the exit that on_absent names, see [input]',
                '# role = "exit"',
            ]
        )
    return blocks
