"""What a column holds and what it is for, told from its name and from facts about its values."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

from cohortflow.errors import InputError
from cohortflow.history.labels import period_of_label
from cohortflow.history.times import detect_format
from cohortflow.periods import Calendar

MOST_NAMES = 100  # different values up to which a column can hold events or states
MOST_GROUPS = 30  # ... or segments
ENOUGH = 0.8  # share of the values that must look alike
LOOKED_AT = 400
HINTS: dict[str, tuple[str, ...]] = {
    "customer": (
        "customer",
        "client",
        "member",
        "account",
        "user",
        "subscriber",
        "household",
        "person",
        "cust",
    ),
    "time": (
        "time",
        "at",
        "when",
        "date",
        "day",
        "timestamp",
        "created",
        "month",
        "period",
        "week",
        "quarter",
    ),
    "end": ("end", "ends", "ended", "stop", "stopped", "closed", "until"),
    "event": ("event", "what", "action", "activity", "type", "kind"),
    "state": ("state", "status", "stage", "plan", "tier", "level"),
    "from": ("from", "origin", "before"),
    "to": ("to", "target", "after"),
    "n": ("n", "count", "customers", "number", "moves"),
    "valid_until": ("expires", "expiry", "valid", "paid", "renewal"),
    "loaded_at": ("loaded", "ingested", "extracted", "received"),
    "amount": (
        "amount",
        "price",
        "paid",
        "total",
        "sum",
        "revenue",
        "pounds",
        "euro",
        "eur",
        "gbp",
        "usd",
        "value",
    ),
    "event_id": ("row", "event", "transaction", "record", "line", "number"),
}
_NUMBER = re.compile(r"[-+]?\d+([.,]\d+)?|[-+]?\d{1,3}([.,]\d{3})+([.,]\d+)?")
_MONEY = re.compile(r"[-+]?[\d.,]*\d[.,]\d{1,2}")
_LABELS = {
    "quarter": re.compile(r"\d{4} ?-?[Qq][1-4]|[Qq][1-4][ -/]\d{4}"),
    "week": re.compile(r"\d{4}-W\d{2}"),
    "month": re.compile(r"(19|20)\d{2}-?(0[1-9]|1[0-2])|[A-Za-z]{3}[A-Za-z]*[- ](\d{2}|\d{4})"),
    "year": re.compile(r"(19|20)\d{2}"),
}


@dataclass(frozen=True)
class Column:
    """A column of an extract.

    kind : instant | period | number | text | empty;  period : the kind of period its labels are, or ""
    filled : rows with a value;  different : how many different values, about;  money : values with pence
    names : (value, rows), most frequent first, for a column with few different values
    constant : share of the customers with one value only; None without customers
    """

    name: str
    kind: str
    filled: int
    different: int
    period: str = ""
    money: bool = False
    names: tuple[tuple[str, int], ...] = ()
    constant: float | None = None

    def hint(self, role: str) -> int:
        """2: a word of the name says so; 1: part of the name does; 0: no.

        >>> Column("member_no", "text", 9, 3).hint("customer"), Column("colour", "text", 9, 3).hint("customer")
        (2, 0)
        """
        spaced = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", self.name).casefold()
        words = [w for w in re.split(r"[^a-z0-9]+", spaced) if w]
        if any(h in words for h in HINTS[role]):
            return 2
        return int(any(len(h) > 3 and h in spaced for h in HINTS[role]))


def kind_of(values: Sequence[str]) -> tuple[str, str]:
    """(kind, kind of period) of a column by the first of its values.

    >>> kind_of(["2026-03-01 10:00", "2026-04-02 11:30"]), kind_of(["2026-Q1", "2026-Q2"]), kind_of(["3,50", "7"])
    (('instant', ''), ('period', 'quarter'), ('number', ''))
    """
    there = [v.strip() for v in values[:LOOKED_AT] if v and v.strip()]
    if not there:
        return "empty", ""
    for period, shape in _LABELS.items():
        labels = [v for v in there if shape.fullmatch(v) and _readable(v)]
        if period != "year" and len(labels) >= ENOUGH * len(there):  # plain years look like plain numbers
            return "period", period
    if _share(there, _is_instant) >= ENOUGH:
        return "instant", ""
    return ("number", "") if _share(there, lambda v: bool(_NUMBER.fullmatch(v))) >= ENOUGH else ("text", "")


def is_money(values: Sequence[str]) -> bool:
    """Whether many values have one or two decimals.

    >>> is_money(["3,50", "12,00", "7,5"]), is_money(["3", "12"])
    (True, False)
    """
    there = [v.strip() for v in values[:LOOKED_AT] if v and v.strip()]
    return bool(there) and _share(there, lambda v: bool(_MONEY.fullmatch(v))) >= 0.5


def wide_periods(header: Sequence[str]) -> tuple[str, tuple[str, ...]]:
    """(kind of period, columns headed by a period) where at least three columns are; else ("", ()).

    >>> wide_periods(["id", "2026-01", "2026-02", "2026-03"])
    ('month', ('2026-01', '2026-02', '2026-03'))
    """
    best: tuple[str, tuple[str, ...]] = ("", ())
    for period, shape in {**_LABELS, "day": re.compile(r"\d{4}-\d{2}-\d{2}")}.items():
        found = tuple(name for name in header if shape.fullmatch(name.strip()))
        if len(found) >= 3 and len(found) > len(best[1]):
            best = (period, found)
    return best


def roles_of(columns: Sequence[Column], rows: int) -> dict[str, str]:
    """Role (customer, time, end, event_id) -> name of the column that looks most like it, for rows of customers."""
    out: dict[str, str] = {}
    instants = [c for c in columns if c.kind in ("instant", "period")]
    ends = [c for c in instants if c.hint("end") == 2 and c.kind == "instant"]
    plain = [c for c in instants if c not in ends and not c.hint("valid_until") and not c.hint("loaded_at")]
    best = max(plain or instants, key=lambda c: (c.hint("time"), c.filled), default=None)
    if best is not None:
        out["time"] = best.name
    if ends and best not in ends:
        out["end"] = ends[0].name
    who = [c for c in columns if c.kind in ("text", "number") and c.different > 1 and not c.money]
    who = [c for c in who if c.filled > 0.5 * rows]

    def fits(c: Column) -> tuple[int, bool, int]:
        named = c.hint("customer") or int(bool(re.search(r"(^|[_ ])id$", c.name.casefold())))
        return named, c.different < 0.95 * rows, c.different

    found = max(who, key=fits, default=None)
    if found is not None and (fits(found)[0] or found.different > MOST_GROUPS):
        out["customer"] = found.name
        once = [
            c for c in who if c is not found and c.different > 0.95 * c.filled and c.different > MOST_NAMES
        ]
        keys = [c for c in once if c.hint("event_id") or c.name.casefold().endswith("id")]
        if keys:
            out["event_id"] = keys[0].name
    return out


def name_column(columns: Sequence[Column], taken: Mapping[str, str]) -> Column | None:
    """The column of events or states: few different values, and customers that have more than one of them."""
    free = [c for c in columns if c.name not in taken.values() and c.names and c.kind in ("text", "number")]

    def fits(c: Column) -> tuple[int, float]:
        return max(c.hint("event"), c.hint("state")), 1.0 - (c.constant if c.constant is not None else 1.0)

    likely = [c for c in free if not c.money and (c.kind == "text" or fits(c)[0])]
    return max(likely, key=fits, default=None)


def count_columns(columns: Sequence[Column]) -> dict[str, str]:
    """from, to, n of a table of bare counts; empty when it is none."""
    out: dict[str, str] = {}
    for role, kinds in (("from", ("text", "number")), ("to", ("text", "number")), ("n", ("number",))):
        fits = [c for c in columns if c.hint(role) == 2 and c.kind in kinds and c.name not in out.values()]
        if not fits:
            return {}
        out[role] = fits[0].name
    return out


def period_kind(days: int) -> str:
    """A period that gives a history of some length: months from a year on, weeks from a quarter on, else days.

    >>> period_kind(1000), period_kind(100), period_kind(20)
    ('month', 'week', 'day')
    """
    return "month" if days >= 360 else "week" if days >= 84 else "day"


def _share(values: Sequence[str], test: Callable[[str], bool]) -> float:
    return sum(bool(test(v)) for v in values) / len(values)


def _is_instant(value: str) -> bool:
    try:
        form = detect_format([value], where="")
    except InputError:
        return False
    if form.patterns and form.patterns[0].startswith("%Y%m%d"):
        return "1900" <= value[:4] <= "2100" and _readable(value)
    return True


def _readable(value: str) -> bool:
    return any(
        period_of_label(value, Calendar(kind)) is not None for kind in ("month", "quarter", "week", "day")
    )
