"""What an extract holds, before there is a study: columns, dialect, dates, ids, and the names in it with their place
in the customers' histories. Nothing is decided here that a person must decide; `cohortflow draft` writes it down.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import pandas as pd

from cohortflow.history.guess import (
    Column,
)
from cohortflow.history.places import Moments, Name
from cohortflow.record import Record

ROLES = ("customer", "time", "event", "state", "end", "from", "to", "n", "event_id")


@dataclass(frozen=True, repr=False, eq=False)
class Profile(Record):
    """What an extract looks like.

    files : (name, bytes, rows, dialect) of each;  unsplit : records that do not fit the header
    layout : events | history | wide | spells | counts, as it looks;  roles : role -> column
    columns : see guess.Column;  names : events or states with their place in the histories, see places.Name
    stopped : customers whose last row lies before the last period (history, wide)
    when : what the time column tells, see places.Moments; None where there is none (wide, counts)
    periods : columns headed by a period (wide);  delimiter, encoding : of the first file;  decimal : "," if so written
    """

    files: tuple[tuple[str, int, int, str], ...]
    rows: int
    unsplit: int
    layout: str
    roles: Mapping[str, str]
    columns: tuple[Column, ...]
    names: tuple[Name, ...]
    customers: int = 0
    stopped: int = 0
    when: Moments | None = None
    periods: tuple[str, ...] = ()
    period: str = "month"
    delimiter: str = ","
    encoding: str = "utf-8"
    decimal: str = "."
    kind: ClassVar[str] = "profile"

    def to_frame(self) -> pd.DataFrame:
        """name, rows, customers, begins, ends, of, leaves: the events or states, most frequent first."""
        rows = [(n.name, n.rows, n.customers, n.begins, n.ends, n.of, n.leaves) for n in self.names]
        return pd.DataFrame(rows, columns=["name", "rows", "customers", "begins", "ends", "of", "leaves"])

    def headline(self) -> str:
        return f"profile of {self.rows:,} rows, {self.customers:,} customers, layout {self.layout}"

    def about(self) -> Mapping[str, Any]:
        columns = [
            {"name": c.name, "kind": c.kind, "filled": c.filled, "different": c.different}
            for c in self.columns
        ]
        return {"layout": self.layout, "roles": dict(self.roles), "files": [list(f) for f in self.files],
                "unsplit": self.unsplit, "columns": columns}  # fmt: skip

    def column(self, role: str) -> Column | None:
        """The column of a role, if there is one."""
        return next((c for c in self.columns if c.name == self.roles.get(role)), None)

    @property
    def spare(self) -> tuple[Column, ...]:
        """Columns that have no role."""
        return tuple(
            c for c in self.columns if c.name not in self.roles.values() and c.name not in self.periods
        )
