"""What a report holds, before anybody renders it: frozen records of words, figures to draw and tables to read."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from types import MappingProxyType
from typing import Any

from cohortflow.periods import Calendar
from cohortflow.report.chart.style import Drawing
from cohortflow.report.table import Table
from cohortflow.states import States

Draw = Callable[[float], Drawing]


def bound(chart: Callable[..., Drawing], *args: Any, **options: Any) -> Draw:
    """A chart that waits for its width."""
    waiting = partial(chart, *args, **options)

    def draw(width: float) -> Drawing:
        return waiting(width=width)

    return draw


def _empty() -> Mapping[str, str]:
    return MappingProxyType({})


@dataclass(frozen=True)
class Facts:
    """Settings and sizes that the tables do not tell.

    first, last : labels of the first and last period counted;  as_of : last day that counts
    notes : codes of the records ("few_at_risk:quiet", ...) and findings of the check
    verdict, reasons : of the long run
    parts : what the bands hold;  validated : periods ahead that back-tests bear out (None: not tested)
    borne : the same by quantity, as far as tested
    joining : (expected, low, high) number who join up to the horizon
    previous : headline's key -> its figure in the last run, for the change since
    cases : scenario -> "low" or "high";  terms : sentences on how money is counted
    rules : state -> its rule in words;  inputs : (name, bytes, rows, sha256);  settings : name -> "value (origin)"
    absent : table -> why it could not be made
    """

    title: str
    states: States
    calendar: Calendar
    level: float
    horizon: int
    first: str = ""
    last: str = ""
    as_of: str = ""
    seed: int | None = None
    model: str = "plain"
    joiners: str = "constant"
    customers: int | None = None
    moves: int | None = None
    totals: Mapping[str, tuple[str, ...]] = field(default_factory=lambda: MappingProxyType({}))
    excluded: tuple[str, ...] = ()
    notes: tuple[Any, ...] = ()
    verdict: str = ""
    reasons: tuple[str, ...] = ()
    parts: tuple[str, ...] = ()
    validated: int | None = None
    borne: Mapping[str, int] = field(default_factory=lambda: MappingProxyType({}))
    joining: tuple[float, float, float] | None = None
    previous: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    cases: Mapping[str, str] = field(default_factory=_empty)
    terms: tuple[str, ...] = ()
    rules: Mapping[str, str] = field(default_factory=_empty)
    inputs: tuple[tuple[str, int, int | None, str], ...] = ()
    settings: Mapping[str, str] = field(default_factory=_empty)
    people: Mapping[str, str] = field(default_factory=_empty)
    absent: Mapping[str, str] = field(default_factory=_empty)
    version: str = ""
    currency: str = ""
    segment: str = "all"

    @property
    def kind(self) -> str:
        """The calendar's kind of period."""
        return self.calendar.kind

    @property
    def main(self) -> str:
        """The sum that stands first: the total named paying where there is one, else all live customers."""
        return "paying" if "paying" in self.totals else "all_live"

    @property
    def quantities(self) -> tuple[str, ...]:
        """What the base is told in: all_live, the named totals, the states that are not exits."""
        return ("all_live", *self.totals, *self.states.remaining)


@dataclass(frozen=True)
class Finding:
    """Something that spoils or limits a number; `section` is where the number stands."""

    text: str
    section: str


@dataclass(frozen=True)
class Headline:
    """One of the figures that come first: what, how much, its band, a sentence; change since the last run.

    key, amount : for that change, and for the next run's
    """

    label: str
    value: str
    band: str
    basis: str
    key: str = ""
    amount: float = float("nan")
    change: str = ""


@dataclass(frozen=True)
class Exhibit:
    """A chart, a table, or both; `draw` takes a width in inches. `narrow`: redrawn for small screens."""

    key: str
    draw: Draw | None = None
    table: Table | None = None
    plain_words: tuple[str, ...] = ()
    narrow: bool = True
    open: bool = False


@dataclass(frozen=True)
class Section:
    """One part of the page; `key` is its anchor."""

    key: str
    title: str
    lead: tuple[str, ...] = ()
    exhibits: tuple[Exhibit, ...] = ()
    points: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    panel: str = ""
    terms: tuple[tuple[str, str, str], ...] = ()


@dataclass(frozen=True)
class Content:
    """A whole report in its final order.

    standing : sentences beside the first figures: how far validated, which model, what the annex says
    cases : low, base and high side by side
    """

    facts: Facts
    summary: str
    headlines: tuple[Headline, ...]
    findings: tuple[Finding, ...]
    sections: tuple[Section, ...]
    standing: tuple[str, ...] = ()
    cases: Table | None = None

    def findings_in(self, section: str) -> tuple[Finding, ...]:
        """The findings to be said in one section."""
        return tuple(f for f in self.findings if f.section == section)

    def exhibits(self) -> tuple[Exhibit, ...]:
        """Every chart and table, in order."""
        return tuple(e for s in self.sections for e in s.exhibits)
