"""The Tally: additive tables of counts, the only thing that leaves the room of the customers.

Every table is a pandas DataFrame of integers, sorted by its keys, one row a key. Adding two tallies of
disjoint customers adds the rows. Codes: states, segments and kinds are positions in the lists that `meta`
and this module hold; -1 means "none" or "unknown"; periods are ordinals of the calendar.

moves     one row for each (bucket, segment, period, state) and what came next:
          gap = periods to the customer's next row (0 when this is the last), next_state (-1 when last),
          end = moved | as_of (still there on the last day) | exit (the row of an exit, written once, in the
          period of leaving) | unseen (no later row, though the extract goes on)
starts    stays that begin: kind = joined | returned | unknown (history before the log);
          from_state = the exit a returner comes back from
contexts  moves between consecutive periods with tenure (periods since joining, the joining period is 0),
          spell (periods already spent in the state before this one, 0 = just arrived), previous state
ages      customers by joining period, age (periods since joining) and state; an exit stands once, at its age
steps     state at `period` and `k` periods later within one stay, an exit being kept once reached
paths     run-length state paths of a sample of customers: "24285 2*3 1*4 -*2 0*1" = first period, then
          state*periods, "-" for a gap; level = leading zero bits of the sampling hash
amounts   money by period and state: n rows, total and total of squares of the customer's sum in the period
spells    time spent in a state, in days, by what ended it (next_state; -1 = still there)
silences  of customers with an exit by silence in the study: periods without its `of` events after one of them;
          state = the exit, entered = length from which the rule's other conditions held, length = silent periods
          seen, ended = as_of (still silent on the last day) | event (an `of` event came) | otherwise (another exit,
          or the other conditions ceased to hold)
memos     stays that began and ended within one period: kind = joined_and_left | returned_and_left
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, DefinitionsDiffer, InputError, NotIdentified, listed, nearest
from cohortflow.periods import Calendar
from cohortflow.record import Record, frozen_mapping
from cohortflow.states import States

FORMAT_VERSION = 1
ENDS = ("moved", "as_of", "exit", "unseen")
KINDS = ("joined", "returned", "unknown")
SILENCE_ENDS = ("as_of", "event", "otherwise")
MEMOS = ("joined_and_left", "returned_and_left")
FINEST_BITS, COARSE_BITS = 62, 7
CUSTOMERS_FINEST = 20_000
PATHS_SAMPLED = 200_000

KEYS: dict[str, tuple[str, ...]] = {
    "moves": ("bucket", "segment", "period", "gap", "end", "state", "next_state"),
    "starts": ("bucket", "segment", "period", "state", "kind", "from_state"),
    "contexts": ("bucket", "segment", "period", "tenure", "spell", "previous", "state", "next_state"),
    "ages": ("segment", "joined", "kind", "age", "state"),
    "steps": ("segment", "period", "k", "state", "later"),
    "paths": ("segment", "level", "path"),
    "amounts": ("bucket", "segment", "period", "state"),
    "spells": ("bucket", "segment", "state", "next_state"),
    "silences": ("segment", "state", "entered", "length", "ended"),
    "memos": ("segment", "period", "kind", "state"),
}
VALUES: dict[str, tuple[str, ...]] = {
    "moves": ("n", "weight"),
    "starts": ("n", "weight"),
    "contexts": ("n",),
    "ages": ("n",),
    "steps": ("n",),
    "paths": ("n",),
    "amounts": ("n", "total", "squares"),
    "spells": ("n", "days"),
    "silences": ("n",),
    "memos": ("n",),
}


@dataclass(frozen=True)
class Meta:
    """What the tables mean; two tallies add only when their `definitions` agree.

    first, last : ordinals of the first and the last complete period of the window
    segment_columns : (name, role) with role segment | attribute | arm
    segments : one tuple of values a code, sorted, so that a code means the same however it was counted
    definitions : hash of states, rules, calendar, period, gap rule (whatever makes counts comparable)
    bucket_bits, sample_level : see the module text;  weight_scale, amount_scale : integers per unit
    tables : names of the tables that this source could fill (bare counts fill `moves` only)
    """

    states: States
    calendar: Calendar
    first: int
    last: int
    customers: int
    definitions: str
    gap_rule: str = "break"
    segment_columns: tuple[tuple[str, str], ...] = ()
    segments: tuple[tuple[str, ...], ...] = ((),)
    bucket_bits: int = FINEST_BITS
    sample_level: int = 0
    weighted: bool = False
    weight_scale: int = 1
    amount_scale: int = 100
    tables: tuple[str, ...] = tuple(KEYS)
    format_version: int = FORMAT_VERSION


@dataclass(frozen=True, repr=False, eq=False)
class Tally(Record):
    """Counts of a history: see the module text for the tables.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> tally = cf.read_counts([(1, "fresh", "steady", 8), (1, "fresh", "left", 2)], states)
    >>> tally.counts().tolist()
    [[0, 8, 2], [0, 0, 0], [0, 0, 0]]
    """

    meta: Meta
    tables: Mapping[str, pd.DataFrame]
    kind: ClassVar[str] = "tally"

    # ---- making ----
    @classmethod
    def build(cls, meta: Meta, tables: Mapping[str, pd.DataFrame]) -> Tally:
        """Aggregate, sort and freeze raw tables (repeated keys are added up; missing tables are empty)."""
        return cls(meta, frozen_mapping({name: canonical(name, tables.get(name)) for name in KEYS}))

    def __add__(self, other: Tally) -> Tally:
        """The tally of both sets of customers, which must be disjoint; DefinitionsDiffer otherwise."""
        if not isinstance(other, Tally):
            return NotImplemented
        a, b = _aligned(self, other)
        joined = {n: pd.concat([a.tables[n], b.tables[n]], ignore_index=True) for n in KEYS}
        meta = replace(
            a.meta,
            customers=a.meta.customers + b.meta.customers,
            first=min(a.meta.first, b.meta.first),
            last=max(a.meta.last, b.meta.last),
            tables=tuple(n for n in a.meta.tables if n in b.meta.tables),
        )
        return _thinned(Tally.build(meta, joined))

    # ---- reading off ----
    @property
    def states(self) -> States:
        return self.meta.states

    @property
    def calendar(self) -> Calendar:
        return self.meta.calendar

    def table(self, name: str) -> pd.DataFrame:
        """One table; NotIdentified when this source could not fill it (bare counts have `moves` only)."""
        if name not in KEYS:
            raise CallError(f'The tally has no table "{name}"{nearest(name, KEYS)}. Tables: {listed(KEYS)}.')
        if name not in self.meta.tables:
            raise NotIdentified(
                f'These counts do not hold the table "{name}": they came from bare transition counts. '
                "Read the customers' rows (layout events, history, wide or spells) for what needs it."
            )
        return self.tables[name]

    def period(self, period: str | int) -> int:
        """Ordinal of a period given as label or ordinal; CallError when outside the window."""
        ordinal = self.calendar.parse(period) if isinstance(period, str) else int(period)
        if not self.meta.first <= ordinal <= self.meta.last:
            raise CallError(
                f'Period "{self.calendar.label(ordinal)}" is outside the counted window, '
                f"{self.calendar.label(self.meta.first)} to {self.calendar.label(self.meta.last)}."
            )
        return ordinal

    @cached_property
    def one_step(self) -> pd.DataFrame:
        """The rows of `moves` that are moves between consecutive periods."""
        moves = self.table("moves")
        return moves[(moves["gap"] == 1) & (moves["next_state"] >= 0)]

    def origins(self) -> list[int]:
        """Ordinals of the periods that one-period moves start in, ascending."""
        return [int(p) for p in np.unique(self.one_step["period"])]

    def counts(self, *, weighted: bool = False) -> np.ndarray:
        """(K, K) numbers of one-period moves, row = from, column = to; with `weighted`, case weights."""
        return self._cube(self.one_step, [], weighted)[0]

    def counts_by_period(self, *, weighted: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """(T,) ordinals of the origin periods and (T, K, K) one-period moves."""
        cube, keys = self._cube(self.one_step, ["period"], weighted)
        return keys[:, 0], cube

    def counts_by_bucket(self, *, weighted: bool = False) -> np.ndarray:
        """(B, K, K) one-period moves of each bucket of customers that moved."""
        return self._cube(self.one_step, ["bucket"], weighted)[0]

    def mix(self, period: str | int | None = None, *, weighted: bool = False) -> pd.Series:
        """Customers by state at the end of `period` (default: the last); exits are 0. Index: state names."""
        ordinal = self.meta.last if period is None else self.period(period)
        moves = self.table("moves")
        here = moves[(moves["period"] == ordinal) & (moves["end"] != ENDS.index("exit"))]
        values = self._measure(here, weighted)
        sums = np.bincount(here["state"], weights=values, minlength=len(self.states))
        return pd.Series(sums if weighted else sums.astype(np.int64), index=list(self.states.names))

    def joiners(self, kind: str = "joined") -> tuple[np.ndarray, np.ndarray]:
        """(T,) ordinals first..last and (T, K) stays that began, of kind joined, returned or unknown."""
        if kind not in KINDS:
            raise CallError(f'Unknown kind "{kind}"{nearest(kind, KINDS)}. Kinds: {listed(KINDS)}.')
        starts = self.table("starts")
        rows = starts[(starts["kind"] == KINDS.index(kind)) & (starts["period"] >= self.meta.first)]
        periods = np.arange(self.meta.first, self.meta.last + 1)
        out = np.zeros((len(periods), len(self.states)), dtype=np.int64)
        np.add.at(out, (rows["period"].to_numpy() - self.meta.first, rows["state"].to_numpy()), rows["n"])
        return periods, out

    # ---- cutting ----
    def between(
        self, first: int | None = None, last: int | None = None, *, exclude: Iterable[int] = ()
    ) -> Tally:
        """Only moves (and contexts, steps) that start in the periods first..last and not in `exclude`.

        The other tables are kept whole; use `at_origin` to forget everything after a period.
        """
        lo = self.meta.first if first is None else first
        hi = self.meta.last if last is None else last
        dropped = list(exclude)
        kept = dict(self.tables)
        for name in ("moves", "contexts", "steps"):
            period = kept[name]["period"]
            kept[name] = kept[name][period.between(lo, hi) & ~period.isin(dropped)]
        return Tally.build(self.meta, kept)

    def at_origin(self, period: str | int) -> Tally:
        """What this tally was when `period` was the last complete one: everything later is forgotten.

        `spells` and `silences` cannot be cut back (they have no dates) and are not offered.
        """
        from cohortflow.tally_cuts import cut_back

        return cut_back(self, self.period(period))

    def segment_values(self, column: str) -> list[str]:
        """Values of a segment column, sorted."""
        where = self._segment_column(column)
        return sorted({values[where] for values in self.meta.segments})

    def by_segment(self, column: str) -> dict[str, Tally]:
        """One tally for each value of a segment column (segment, attribute or arm), sorted by value."""
        where = self._segment_column(column)
        return {value: self._of_segment(where, value) for value in self.segment_values(column)}

    def _segment_column(self, column: str) -> int:
        names = [name for name, _ in self.meta.segment_columns]
        if column not in names:
            raise CallError(
                f'There is no segment "{column}"{nearest(column, names)}. Segments here: {listed(names)}.'
            )
        return names.index(column)

    def _of_segment(self, where: int, value: str) -> Tally:
        codes = [i for i, values in enumerate(self.meta.segments) if values[where] == value]
        kept = {n: t[t["segment"].isin(codes)] for n, t in self.tables.items()}
        starts = kept["starts"]
        customers = int(starts.loc[starts["kind"] != KINDS.index("returned"), "n"].sum())
        return Tally.build(replace(self.meta, customers=customers), kept)

    # ---- laws ----
    def check_conservation(self) -> None:
        """Every row of a state is reached by a move or a start: InputError naming the first cell that is not.

        rows(t, j) = moves that arrive at (t, j) + starts at (t, j), for each segment, period and state.
        """
        moves, starts = self.table("moves"), self.table("starts")
        where = ["segment", "period", "state"]
        rows = moves.groupby(where)["n"].sum()
        gone = moves[moves["next_state"] >= 0]
        arrivals = gone.assign(period=gone["period"] + gone["gap"], state=gone["next_state"])
        reached = arrivals.groupby(where)["n"].sum().add(starts.groupby(where)["n"].sum(), fill_value=0)
        off = rows.sub(reached, fill_value=0)
        off = off[off != 0]
        if len(off):
            segment, period, state = off.index[0]
            raise InputError(
                f"The counts do not balance: in period {self.calendar.label(period)}, state "
                f'"{self.states.names[state]}", rows and arrivals differ by {int(off.iloc[0])}. '
                "The tally was damaged or built by hand; count the extract again."
            )

    # ---- record manners ----
    def to_frame(self) -> pd.DataFrame:
        """One-period moves summed over buckets: segment, period, from, to, n (labels, not codes)."""
        rows = self.one_step.groupby(["segment", "period", "state", "next_state"], as_index=False)["n"].sum()
        names = np.array(self.states.names, dtype=object)
        labels = [" / ".join(v) or "all" for v in self.meta.segments]
        return pd.DataFrame(
            {
                "segment": [labels[s] for s in rows["segment"]],
                "period": self.calendar.labels(rows["period"].to_numpy()),
                "from": names[rows["state"].to_numpy(dtype=int)],
                "to": names[rows["next_state"].to_numpy(dtype=int)],
                "n": rows["n"].to_numpy(),
            }
        )

    def headline(self) -> str:
        first, last = self.calendar.label(self.meta.first), self.calendar.label(self.meta.last)
        return (
            f"tally of {self.meta.customers:,} customers, {first} to {last}, "
            f"{int(self.one_step['n'].sum()):,} moves"
        )

    def about(self) -> Mapping[str, Any]:
        return {"states": list(self.states.names), "definitions": self.meta.definitions}

    # ---- inner ----
    def _measure(self, rows: pd.DataFrame, weighted: bool) -> np.ndarray:
        if not weighted:
            return rows["n"].to_numpy()
        return rows["weight"].to_numpy() / self.meta.weight_scale

    def _cube(self, rows: pd.DataFrame, keys: list[str], weighted: bool) -> tuple[np.ndarray, np.ndarray]:
        """(G, K, K) sums and (G, len(keys)) key values; without keys a plain (K, K)."""
        size = len(self.states)
        value = self._measure(rows, weighted)
        cell = rows["state"].to_numpy() * size + rows["next_state"].to_numpy()
        dtype = float if weighted else np.int64
        if not keys:
            flat = np.bincount(cell, weights=value, minlength=size * size).astype(dtype)
            return flat.reshape(size, size), np.empty((0, 0))
        found, group = np.unique(rows[keys].to_numpy(), axis=0, return_inverse=True)
        cube = np.zeros((len(found), size * size), dtype=dtype)
        np.add.at(cube, (group.reshape(-1), cell), value)
        return cube.reshape(len(found), size, size), found


def canonical(name: str, rows: pd.DataFrame | None) -> pd.DataFrame:
    """The rows of one table added up by key, sorted, with the fixed columns and types."""
    keys, values = list(KEYS[name]), list(VALUES[name])
    if rows is None or len(rows) == 0:
        rows = pd.DataFrame({c: pd.Series(dtype=_dtype(c)) for c in (*keys, *values)})
    else:
        rows = rows[[*keys, *values]].groupby(keys, as_index=False, sort=True)[values].sum()
    return rows.astype({c: _dtype(c) for c in (*keys, *values)}).reset_index(drop=True)


def _dtype(column: str) -> str:
    return "object" if column == "path" else "int64"


def _aligned(a: Tally, b: Tally) -> tuple[Tally, Tally]:
    """Both on the coarser buckets, the deeper sample and one list of segments."""
    for field in ("definitions", "states", "calendar", "gap_rule", "weighted", "segment_columns"):
        one, two = getattr(a.meta, field), getattr(b.meta, field)
        if one != two:
            raise DefinitionsDiffer(
                f"Tallies can be added only under the same definitions; {field} differs: {one} and {two}."
            )
    bits = min(a.meta.bucket_bits, b.meta.bucket_bits)
    if a.meta.customers + b.meta.customers > CUSTOMERS_FINEST:
        bits = min(bits, COARSE_BITS)
    level = max(a.meta.sample_level, b.meta.sample_level)
    segments = tuple(sorted(set(a.meta.segments) | set(b.meta.segments)))
    return _recoded(a, bits, level, segments), _recoded(b, bits, level, segments)


def _recoded(tally: Tally, bits: int, level: int, segments: tuple[tuple[str, ...], ...]) -> Tally:
    code = np.array([segments.index(s) for s in tally.meta.segments], dtype=np.int64)
    shift = tally.meta.bucket_bits - bits
    tables = {}
    for name, table in tally.tables.items():
        changed = {"segment": code[table["segment"].to_numpy()]}
        if "bucket" in table and shift:
            changed["bucket"] = table["bucket"].to_numpy() >> shift
        tables[name] = table.assign(**changed)
    tables["paths"] = tables["paths"][tables["paths"]["level"] >= level]
    meta = replace(tally.meta, bucket_bits=bits, sample_level=level, segments=segments)
    return Tally(meta, frozen_mapping(tables))


def _thinned(tally: Tally) -> Tally:
    """The lowest sample level that leaves at most PATHS_SAMPLED customers in `paths`."""
    paths, level = tally.tables["paths"], tally.meta.sample_level
    while int(paths["n"].sum()) > PATHS_SAMPLED:
        level += 1
        paths = paths[paths["level"] >= level]
    meta = replace(tally.meta, sample_level=level)
    return Tally(meta, frozen_mapping({**tally.tables, "paths": paths.reset_index(drop=True)}))
