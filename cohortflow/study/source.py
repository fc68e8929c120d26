"""The text of a study file: typed access to its keys, refusals that name file, line, table and key."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable, Mapping
from datetime import date, datetime
from typing import Any, TypeVar

from cohortflow.errors import CohortflowError, StudyError, listed, nearest

T = TypeVar("T")
REQUIRED: Any = object()
_HEADER = re.compile(r"^\s*\[{1,2}\s*([A-Za-z0-9_.-]+)\s*\]{1,2}\s*(#.*)?$")
_KEY = re.compile(r"^\s*\"?([A-Za-z0-9_-]+)\"?\s*(\.[^=]*)?=")
_KIND_OF = (
    (bool, "true or false"),
    (int, "a whole number"),
    (float, "a number"),
    (str, "a text"),
    (list, "a list"),
    (Mapping, "a table"),
    (date, "a date"),
)


class Source:
    """Where the settings came from: the file's name and text, and what was overridden from outside."""

    def __init__(self, file: str, text: str = "", overridden: Mapping[str, str] | None = None) -> None:
        self.file = file
        self.lines = _lines_of(text)
        self.overridden = dict(overridden or {})
        self.origins: dict[str, str] = {}

    def sorted_origins(self) -> dict[str, str]:
        """ "table.key" -> study file, default, or what changed it; sorted."""
        return dict(sorted({**self.origins, **self.overridden}.items()))

    def where(self, table: str, number: int, key: str) -> str:
        """`veg_box.toml, line 7`, or which option set the key, or only the file."""
        dotted = f"{table}.{key}"
        if dotted in self.overridden:
            return f"{self.file}, changed by {self.overridden[dotted]}"
        line = self.lines.get((table, number, key)) or self.lines.get((table, number, ""))
        return f"{self.file}, line {line}" if line else self.file


class Table:
    """One table of the file. Every getter checks the type; unknown keys are refused at once.

    `name` is the table's key in the file ("state"), `number` its place among tables of that name, `shown`
    what messages call it ('[[state]] "quiet"'), `path` the key of `name` that this table is nested in.
    """

    def __init__(
        self,
        source: Source,
        name: str,
        data: Mapping[str, Any],
        *,
        keys: Iterable[str] | None = None,
        number: int | None = None,
        shown: str = "",
        path: str = "",
    ) -> None:
        self.source, self.name, self.data, self.number, self.path = source, name, data, number, path
        self.shown = shown or f"[{name}]"
        for key in data:
            if keys is not None and key not in (known := tuple(keys)):
                raise self.refuse(key, f"unknown key{nearest(key, known)}. Known keys: {listed(known, 40)}.")

    @property
    def _single(self) -> bool:
        """Whether the origin of each key is worth noting: one table of that name, not nested."""
        return bool(self.name) and not self.path and self.number is None

    def refuse(self, key: str, text: str) -> StudyError:
        """The error to raise for a key of this table."""
        inner = f" {self.path}:" if self.path else ""
        place = self.source.where(self.name, self.number or 0, self.path.split(" ")[0] or key)
        return StudyError(f"{place}: {self.shown}{inner} {key}: {text}")

    def __contains__(self, key: str) -> bool:
        return key in self.data

    def get(self, key: str, default: Any, kind: type | tuple[type, ...], wanted: str) -> Any:
        """The value of a key, its type checked; notes where it came from."""
        dotted = f"{self.name}.{key}"
        if key not in self.data:
            if default is REQUIRED:
                raise self.refuse(key, f"missing; it needs {wanted}{nearest_given(key, self.data)}.")
            if self._single:
                self.source.origins.setdefault(dotted, "default")
            return default
        value = self.data[key]
        if self._single:
            self.source.origins[dotted] = self.source.overridden.get(dotted, "study file")
        kinds = kind if isinstance(kind, tuple) else (kind,)
        if not isinstance(value, kinds) or (isinstance(value, bool) and bool not in kinds):
            raise self.refuse(key, f"needs {wanted}, got {shown_value(value)}.")
        return value

    def text(self, key: str, default: Any = REQUIRED, *, choices: Iterable[str] = ()) -> Any:
        """A non-empty text, one of `choices` if given."""
        allowed = tuple(choices)
        value = self.get(key, default, str, f"one of {listed(allowed)}" if allowed else "a text")
        if value is default:
            return value
        if not value.strip():
            raise self.refuse(key, "is an empty text; leave the key out or fill it in.")
        if allowed and value not in allowed:
            raise self.refuse(
                key, f'unknown value "{value}"{nearest(value, allowed)}. Allowed: {listed(allowed)}.'
            )
        return value

    def texts(self, key: str, default: Any = REQUIRED) -> Any:
        """A list of different, non-empty texts, as a tuple."""
        value = self.get(key, default, (list, tuple), 'a list of texts, like ["a", "b"]')
        if value is default:
            return value
        for item in value:
            if not isinstance(item, str) or not item.strip():
                raise self.refuse(key, f"needs non-empty texts, got {shown_value(item)}.")
        repeated = sorted({item for item in value if list(value).count(item) > 1})
        if repeated:
            raise self.refuse(key, f"has {listed(repeated)} more than once.")
        return tuple(value)

    def integer(self, key: str, default: Any = REQUIRED, *, least: int | None = None) -> Any:
        """A whole number of at least `least`."""
        value = self.get(key, default, int, "a whole number")
        if value is not default and least is not None and value < least:
            raise self.refuse(key, f"needs a whole number of at least {least}, got {value}.")
        return value

    def number_of(
        self, key: str, default: Any = REQUIRED, *, least: float = -math.inf, most: float = math.inf
    ) -> Any:
        """A finite number within least .. most."""
        value = self.get(key, default, (int, float), "a number")
        if value is default:
            return value
        if not math.isfinite(value) or not least <= value <= most:
            raise self.refuse(key, f"needs a number {_range(least, most)}, got {value}.")
        return float(value)

    def flag(self, key: str, default: bool | None) -> bool | None:
        """true or false."""
        value: bool | None = self.get(key, default, bool, "true or false")
        return value

    def day(self, key: str, default: Any = REQUIRED) -> Any:
        """A date, written as a TOML date or as text."""
        value = self.get(key, default, (str, date), 'a date like "2026-09-30"')
        if value is default:
            return value
        if isinstance(value, datetime):
            raise self.refuse(key, f"needs a date without a clock time, got {value.isoformat()}.")
        try:
            return value if isinstance(value, date) else date.fromisoformat(value)
        except ValueError:
            raise self.refuse(
                key, f'"{value}" is not a date; write it as year-month-day, "2026-09-30".'
            ) from None

    def attempt(self, key: str, call: Callable[..., T], *arguments: Any) -> T:
        """The result of a call of the core; its refusal becomes one of this key."""
        try:
            return call(*arguments)
        except CohortflowError as error:
            raise self.refuse(key, str(error)) from None

    def one_of(self, key: str, name: str, known: Iterable[str], what: str) -> str:
        """`name` if it is known; else a refusal with the nearest known name."""
        names = tuple(known)
        if name not in names:
            raise self.refuse(key, f'unknown {what} "{name}"{nearest(name, names)}. Known: {listed(names)}.')
        return name

    def inner(self, key: str, data: Any, keys: Iterable[str] | None, path: str = "") -> Table:
        """A table within this one, for instance the `when` of a state."""
        where = f"{self.path} {path or key}".strip()
        if not isinstance(data, Mapping):
            raise self.refuse(key, f"needs a table {{ ... }}, got {shown_value(data)}.")
        return Table(
            self.source, self.name, data, keys=keys, number=self.number, shown=self.shown, path=where
        )


def nearest_given(key: str, given: Iterable[str]) -> str:
    """A hint for a missing key: the key of the table that looks like it."""
    return nearest(key, given).replace("did you mean", "is it the one written")


def shown_value(value: Any) -> str:
    """A value with its kind, for messages: `the text "8"`, `a whole number 8`."""
    if isinstance(value, str):
        return f'the text "{value}"'
    kind = next((name for kind, name in _KIND_OF if isinstance(value, kind)), type(value).__name__)
    return f"{kind} ({value})" if isinstance(value, (bool, int, float, date)) else kind


def _range(least: float, most: float) -> str:
    if most == math.inf:
        return "that is finite" if least == -math.inf else f"of at least {least:g}"
    return f"from {least:g} to {most:g}"


def _lines_of(text: str) -> dict[tuple[str, int, str], int]:
    """(table, number, key) -> line; key "" is the table's header. Best effort on top-level keys."""
    lines: dict[tuple[str, int, str], int] = {}
    seen: dict[str, int] = {}
    table, number = "", 0
    for count, line in enumerate(text.splitlines(), start=1):
        if header := _HEADER.match(line):
            table, _, inner = header[1].partition(".")
            if not inner:
                number = seen[table] = seen.get(table, -1) + 1
            lines.setdefault((table, number, inner), count)
        elif key := _KEY.match(line):
            lines.setdefault((table, number, key[1]), count)
    return lines
