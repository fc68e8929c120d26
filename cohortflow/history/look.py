"""Looking at an extract before there is a study: which layout it has, what its columns are for."""

from __future__ import annotations

import glob
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from cohortflow.errors import CallError, InputError, listed, nearest
from cohortflow.history.columns import field_of, money_style
from cohortflow.history.engine import Engine, opened
from cohortflow.history.guess import (
    MOST_NAMES,
    Column,
    count_columns,
    is_money,
    kind_of,
    name_column,
    roles_of,
    wide_periods,
)
from cohortflow.history.places import Moments, Name, moments, names_of, once_a_period, stop_appearing
from cohortflow.history.profile import ROLES, Profile
from cohortflow.history.sources import Source, file_source, found_files


def profile(
    files: Iterable[str | Path],
    *,
    encoding: str | None = None,
    delimiter: str | None = None,
    date_format: str | None = None,
    columns: Mapping[str, str] | None = None,
) -> Profile:
    """Look at the files of an extract, which share one header.

    columns : role -> column where the guess is known to be wrong (customer, time, event, state, end, from, to, n)

    InputError when the files cannot be read, day and month cannot be told apart, or no column can be the customers.

    >>> import pathlib, tempfile
    >>> lines = ["member,at,what", *(f"m{i},2026-0{1 + i % 5}-03,bought" for i in range(40))]
    >>> with tempfile.TemporaryDirectory() as home:
    ...     log = pathlib.Path(home) / "log.csv"
    ...     _ = log.write_text("\\n".join(lines))
    ...     found = profile([log])
    >>> found, dict(found.roles)
    (<profile of 40 rows, 40 customers, layout events>, {'time': 'at', 'customer': 'member', 'event': 'what'})
    """
    known = _known(columns)
    paths = given_files(files)
    size = sum(path.stat().st_size for _, path in paths)
    with opened(input_bytes=size) as engine:
        sources = [
            file_source(engine, path.name, path, i, encoding=encoding, delimiter=delimiter, fingerprint=False)
            for i, (_, path) in enumerate(paths)
        ]
        look = _Look(engine, sources, date_format)
        return look.profile(known)


def given_files(files: Iterable[str | Path]) -> list[tuple[str, Path]]:
    """(name, path) of files given one by one or as patterns; a file that is there is no pattern."""
    whole = [Path(f).absolute() for f in files]
    return found_files([glob.escape(str(f)) if f.is_file() else str(f) for f in whole], Path())


def _known(columns: Mapping[str, str] | None) -> dict[str, str]:
    for role in columns or {}:
        if role not in ROLES:
            raise CallError(
                f'Unknown role "{role}"{nearest(role, ROLES)}. Roles of columns: {listed(ROLES)}.'
            )
    return dict(columns or {})


@dataclass
class _Look:
    """The extract as text columns of the table `extract`, and the questions put to it."""

    engine: Engine
    sources: Sequence[Source]
    date_format: str | None
    place: dict[str, str] = field(default_factory=dict)  # column -> its name in `extract`

    def profile(self, known: dict[str, str]) -> Profile:
        first = self.sources[0]
        self._load(first.columns)
        unsplit = self._unsplit()
        rows = int(self.engine.one("SELECT count(*) FROM extract"))
        if rows == 0:
            raise InputError(f"{listed(s.name for s in self.sources)}: no rows under the header line.")
        columns = self._columns(first.columns, rows)
        known = {role: first.columns[first.column(name, role)] for role, name in known.items()}
        base = Profile(
            files=tuple((s.name, s.size, s.rows, s.shown) for s in self.sources), rows=rows, unsplit=unsplit,
            layout="events", roles=known, columns=columns, names=(),
            delimiter=first.dialect.delimiter if first.dialect else ",",
            encoding=first.dialect.encoding if first.dialect else "utf-8",
            decimal=money_style([v for c in columns if c.money for v in self._some(c.name)],
                                first.dialect.delimiter if first.dialect else None, None).decimal,
        )  # fmt: skip
        return self._of_counts(base) or self._of_customers(base)

    # ---- the table ----
    def _load(self, header: Sequence[str]) -> None:
        self.place = {name: f"c{i}" for i, name in enumerate(header)}
        for number, source in enumerate(self.sources):
            parts = ", ".join(f"{field_of(source, n, 'draft').text} AS {self.place[n]}" for n in header)
            verb = "INSERT INTO extract" if number else "CREATE TABLE extract AS"
            before = int(self.engine.one("SELECT count(*) FROM extract")) if number else 0
            try:
                self.engine.run(f"{verb} SELECT {parts} FROM {source.relation}")
            except Exception as error:
                raise InputError(
                    f"{source.name}: cannot read the file: {str(error).splitlines()[0]}"
                ) from None
            source.rows = int(self.engine.one("SELECT count(*) FROM extract")) - before

    def _unsplit(self) -> int:
        tables = [f"bad_{i}" for i, s in enumerate(self.sources) if s.dialect is not None]
        return sum(
            int(self.engine.one(f"SELECT count(DISTINCT line_byte_position) FROM {table}"))
            for table in tables
        )

    def _some(self, name: str) -> list[str]:
        c = self.place[name]
        found = self.engine.rows(f"SELECT {c} FROM extract WHERE trim({c}) <> '' LIMIT 2000")
        return [str(r[0]) for r in found]

    def _columns(self, header: Sequence[str], rows: int) -> tuple[Column, ...]:
        asked = ", ".join(
            f"count(nullif(trim({c}), '')), approx_count_distinct(nullif(trim({c}), ''))"
            for c in self.place.values()
        )
        facts = self.engine.rows(f"SELECT {asked} FROM extract")[0]
        out = []
        for i, name in enumerate(header):
            some = self._some(name)
            kind, period = kind_of(some)
            names = self._values(name) if facts[2 * i + 1] <= 2 * MOST_NAMES and kind != "empty" else ()
            different = len(names) if names else min(int(facts[2 * i + 1]), int(facts[2 * i]))
            money = kind == "number" and is_money(some)
            out.append(Column(name, kind, int(facts[2 * i]), different, period, money, names))
        return tuple(out)

    def _values(self, name: str) -> tuple[tuple[str, int], ...]:
        c = self.place[name]
        found = self.engine.rows(
            f"SELECT {c}, count(*) FROM extract WHERE trim({c}) <> '' GROUP BY 1 ORDER BY 2 DESC, 1 "
            f"LIMIT {MOST_NAMES + 1}"
        )
        return tuple((str(v), int(n)) for v, n in found) if len(found) <= MOST_NAMES else ()

    # ---- what it is ----
    def _of_counts(self, base: Profile) -> Profile | None:
        found = {**count_columns(base.columns), **base.roles}
        if not {"from", "to", "n"} <= set(found) or "customer" in base.roles:
            return None
        time = roles_of(base.columns, base.rows).get("time")
        steps = [c.name for c in base.columns if c.kind == "number" and c.hint("time") == 2]
        found.setdefault("time", time or (steps[0] if steps else ""))
        if not found["time"]:
            return None
        when = moments(
            self.engine, self.place[found["time"]], self._column(base, found["time"]), self.date_format
        )
        names = [v for role in ("from", "to") for v, _ in self._column(base, found[role]).names]
        departed = {v for v, _ in self._column(base, found["from"]).names}
        states = tuple(Name(n, 0, 0, leaves=int(n in departed)) for n in dict.fromkeys(map(str.strip, names)))
        return replace(base, layout="counts", roles=found, names=states, when=when, period=when.period)

    def _of_customers(self, base: Profile) -> Profile:
        roles = {**self._roles(base), **base.roles}
        if "customer" not in roles:
            raise InputError(
                f"{base.files[0][0]}: no column looks like the customers. The columns are "
                f"{listed(c.name for c in base.columns)}. Say which it is: --column customer=NAME."
            )
        columns = self._constant(base.columns, self.place[roles["customer"]])
        id_ = f"trim({self.place[roles['customer']]})"
        who = int(self.engine.one(f"SELECT count(DISTINCT nullif({id_}, '')) FROM extract"))
        base = replace(base, columns=columns, roles=roles, customers=who)
        period, headed = wide_periods([c.name for c in columns])
        if headed and "time" not in base.roles:
            return self._wide(base, period, headed)
        return self._long(base)

    def _roles(self, base: Profile) -> dict[str, str]:
        roles = roles_of(base.columns, base.rows)
        _, headed = wide_periods([c.name for c in base.columns])
        if headed:
            roles = {role: name for role, name in roles.items() if role == "customer"}
        elif "time" not in roles:
            steps = [c for c in base.columns if c.kind == "number" and c.hint("time") == 2 and not c.money]
            roles |= {"time": steps[0].name} if steps else {}
        return roles

    def _wide(self, base: Profile, period: str, headed: tuple[str, ...]) -> Profile:
        union = " UNION ALL ".join(
            f"SELECT {self.place[base.roles['customer']]} AS who, {i}::BIGINT AS t, trim({self.place[h]}) AS name, "
            "rowid AS r FROM extract"
            for i, h in enumerate(headed)
        )
        names = names_of(self.engine, f"SELECT * FROM ({union}) WHERE name <> ''")
        stopped = stop_appearing(self.engine)
        return replace(base, layout="wide", names=names, periods=headed, period=period, stopped=stopped)

    def _long(self, base: Profile) -> Profile:
        roles = dict(base.roles)
        if "time" not in roles:
            raise InputError(
                f"{base.files[0][0]}: no column looks like dates or periods. The columns are "
                f"{listed(c.name for c in base.columns)}. Say which it is: --column time=NAME."
            )
        wanted = roles.get("event") or roles.get("state")
        column = self._column(base, wanted) if wanted else name_column(base.columns, roles)
        if column is None or not column.names:
            raise InputError(
                f"{base.files[0][0]}: no column looks like events or states (at most {MOST_NAMES} different "
                f"names). The columns are {listed(c.name for c in base.columns)}. Say which it is: "
                "--column event=NAME or --column state=NAME."
            )
        time = self._column(base, roles["time"])
        when = moments(self.engine, self.place[time.name], time, self.date_format)
        layout = self._layout(base, roles, column, when)
        role = "event" if layout == "events" else "state"
        roles = {r: n for r, n in roles.items() if r not in ("event", "state")} | {role: column.name}
        if layout != "spells":
            roles.pop("end", None)
        if layout != "events":
            roles.pop("event_id", None)
        trimmed = f"trim({self.place[column.name]})" if role == "state" else self.place[column.name]
        rows = (
            f"SELECT {self.place[roles['customer']]} AS who, ({when.sql}) AS t, {trimmed} AS name, rowid AS r "
            f"FROM extract WHERE ({when.sql}) BETWEEN {when.low} AND {when.high} AND trim({trimmed}) <> ''"
        )
        names = names_of(self.engine, rows, steps_of=when if layout == "events" else None)
        stopped = stop_appearing(self.engine) if layout == "history" else 0
        return replace(
            base, layout=layout, roles=roles, names=names, when=when, period=when.period, stopped=stopped
        )

    def _layout(self, base: Profile, roles: Mapping[str, str], column: Column, when: Moments) -> str:
        if "event" in base.roles or "state" in base.roles:
            return "events" if "event" in base.roles else ("spells" if "end" in roles else "history")
        if "end" in roles and column.hint("event") < 2:
            return "spells"
        if when.kind == "instant" and not when.whole_days:
            return "events"
        alone = once_a_period(self.engine, self.place[roles["customer"]], when)
        return "history" if alone and (when.kind != "instant" or when.edges) else "events"

    def _column(self, base: Profile, name: str) -> Column:
        return next(c for c in base.columns if c.name == name)

    def _constant(self, columns: tuple[Column, ...], who: str) -> tuple[Column, ...]:
        """The columns with the share of customers that have one value only."""
        few = [c for c in columns if c.names]
        if not few:
            return columns
        asked = ", ".join(f"avg((min_{self.place[c.name]} = max_{self.place[c.name]})::INTEGER)" for c in few)
        each = ", ".join(
            f"min(nullif(trim({p}), '')) AS min_{p}, max(nullif(trim({p}), '')) AS max_{p}"
            for p in (self.place[c.name] for c in few)
        )
        shares = self.engine.rows(f"SELECT {asked} FROM (SELECT {each} FROM extract GROUP BY {who})")[0]
        known = {c.name: None if s is None else float(s) for c, s in zip(few, shares, strict=True)}
        return tuple(replace(c, constant=known.get(c.name)) for c in columns)
