"""The counting statement for a warehouse: one-period moves counted where the rows live.

The table has one row a customer and period, the period a whole number that grows by one. The answer has
the columns period, from, to, n and is read back with `layout = "counts"`. Customers never leave the
warehouse; what needs more than counts of moves (customer-robust intervals, tenure, segments) cannot be had
this way.

The rules are those of the history layout: a move is counted between consecutive periods and out of no exit;
with `on_absent` a customer who stops appearing takes that exit, in the period after the last row, if the
table has rows of that period at all; moves declared impossible are left out.
"""

from __future__ import annotations

from cohortflow.errors import CallError, listed, nearest
from cohortflow.history.engine import quoted
from cohortflow.states import States

DIALECTS = ("duckdb", "postgres", "spark", "sqlite")


def counting_sql(
    states: States,
    *,
    table: str,
    customer: str = "customer",
    period: str = "period",
    state: str = "state",
    on_absent: str | None = None,
    dialect: str = "duckdb",
) -> str:
    """The statement for one dialect; names and literals are quoted, so any name is safe.

    CallError for an unknown dialect, an empty name, or an `on_absent` that is no exit.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> print(counting_sql(states, table="members", dialect="sqlite").splitlines()[0])
    WITH looked AS (
    """
    if dialect not in DIALECTS:
        raise CallError(
            f'Unknown dialect "{dialect}"{nearest(dialect, DIALECTS)}. Dialects: {listed(DIALECTS)}.'
        )
    if on_absent is not None and on_absent not in states.exits:
        raise CallError(
            f'on_absent must be an exit, got "{on_absent}". The exits are {listed(states.exits)}.'
        )
    who, when, what = (identifier(name, dialect) for name in (customer, period, state))
    source = ".".join(identifier(part, dialect) for part in table.split("."))
    parts = [_step(states, dialect)]
    if on_absent is not None:
        parts.append(_absence(on_absent, states, dialect))
    moves = "\n  UNION ALL\n".join(parts)
    names = ", ".join(literal(name, dialect) for name in states.names)
    when_out, origin, target, many = (identifier(c, dialect) for c in ("period", "from", "to", "n"))
    return f"""\
WITH looked AS (
  SELECT {who} AS who, {when} AS t, {what} AS s
  FROM {source}
  WHERE {what} IN ({names})
), followed AS (
  SELECT who, t, s,
         LEAD(t) OVER (PARTITION BY who ORDER BY t) AS next_t,
         LEAD(s) OVER (PARTITION BY who ORDER BY t) AS next_s
  FROM looked
), moves AS (
{moves}
)
SELECT t AS {when_out}, s AS {origin}, next_s AS {target}, COUNT(*) AS {many}
FROM moves
GROUP BY t, s, next_s
ORDER BY t, s, next_s
"""


def _step(states: States, dialect: str) -> str:
    """Moves between consecutive periods."""
    return f"""\
  SELECT t, s, next_s
  FROM followed
  WHERE next_t = t + 1{_left_out(states, "next_s", dialect)}"""


def _absence(exit_name: str, states: States, dialect: str) -> str:
    """Customers whose last row is followed by a period of the table in which they no longer appear."""
    return f"""\
  SELECT followed.t, followed.s, {literal(exit_name, dialect)} AS next_s
  FROM followed JOIN (SELECT DISTINCT t FROM looked) AS there ON there.t = followed.t + 1
  WHERE followed.next_t IS NULL{_left_out(states, literal(exit_name, dialect), dialect, "followed.s")}"""


def _left_out(states: States, target: str, dialect: str, origin: str = "s") -> str:
    """Conditions that leave out rows of exits and moves declared impossible."""
    exits = ", ".join(literal(name, dialect) for name in states.exits)
    lines = [f"{origin} NOT IN ({exits})"] if exits else []
    lines += [
        f"NOT ({origin} = {literal(a, dialect)} AND {target} = {literal(b, dialect)})"
        for a, b in states.impossible
    ]
    return "".join(f"\n    AND {line}" for line in lines)


def identifier(name: str, dialect: str) -> str:
    """A quoted name of a table or column.

    >>> identifier('a"; drop table x; --', "postgres"), identifier("from", "spark")
    ('"a""; drop table x; --"', '`from`')
    """
    if not name or "\0" in name:
        raise CallError(f"The name {name!r} cannot be the name of a table or column.")
    mark = "`" if dialect == "spark" else '"'
    return mark + name.replace(mark, mark * 2) + mark


def literal(text: str, dialect: str) -> str:
    r"""A text literal; Spark reads backslashes and quotes its own way.

    >>> literal("it's", "duckdb"), literal("it's \\ so", "spark")
    ("'it''s'", "'it\\'s \\\\ so'")
    """
    if dialect == "spark":
        return "'" + text.replace("\\", "\\\\").replace("'", "\\'") + "'"
    return quoted(text)
