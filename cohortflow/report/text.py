"""Names as people wrote them, made safe and short enough to print: width, wrapping, shortening, cleaning."""

from __future__ import annotations

import unicodedata
from collections.abc import Callable
from typing import Any

_HIDDEN = {"Cc", "Cf", "Cs", "Zl", "Zp"}
_JOINERS = {"\u200d", "\u200c"}
_FORMULA = ("=", "+", "-", "@", "\t", "\r")


def clean(value: Any) -> str:
    """One line of text without control characters and without marks that turn the reading direction.

    >>> clean("red\\x1b[31m alert\\nnext")
    'red[31m alert next'
    """
    text = " ".join(str(value).split())
    return "".join(c for c in text if c in _JOINERS or unicodedata.category(c) not in _HIDDEN)


def neutral(value: Any) -> Any:
    """Text that a spreadsheet cannot take for a formula (CWE-1236); other types come back unchanged.

    >>> neutral("=1+1"), neutral("weekly"), neutral(-3)
    ("'=1+1", 'weekly', -3)
    """
    return f"'{value}" if isinstance(value, str) and value.startswith(_FORMULA) else value


def width(text: str) -> int:
    """Columns that a text takes on a terminal: wide signs take two, combining ones none.

    >>> width("weekly"), width("毎週"), width("e\\u0301")
    (6, 4, 1)
    """
    return sum(_cell(c) for c in text)


def _cell(sign: str) -> int:
    if unicodedata.combining(sign) or unicodedata.category(sign) in ("Mn", "Me", "Cf"):
        return 0
    return 2 if unicodedata.east_asian_width(sign) in "WF" else 1


def shorten(text: str, limit: int) -> str:
    """At most `limit` columns; the middle goes, because names often differ at their ends.

    >>> shorten("weekly box, north route", 12)
    'weekly…route'
    """
    if width(text) <= limit:
        return text
    room = limit - 1
    head = _take(text, room - room // 2)
    tail = _take(text[::-1], room // 2)[::-1]
    return f"{head.rstrip()}…{tail.lstrip()}"


def _take(text: str, columns: int) -> str:
    used, end = 0, 0
    for end, sign in enumerate(text):
        used += _cell(sign)
        if used > columns:
            return text[:end]
    return text[: end + 1]


def wrap(
    text: str, room: float, lines: int | None = None, *, measure: Callable[[str], float] = width
) -> list[str]:
    """Lines that measure at most `room` (columns, unless `measure` says otherwise); breaks at spaces,
    underscores and hyphens, inside words only when it must. With `lines` the text is shortened until it fits.

    >>> wrap("card_lapsed after two reminders", 12)
    ['card_lapsed', 'after two', 'reminders']
    >>> wrap("an extraordinarily long name of a state", 10, 2)
    ['an extra…a', 'state']
    """
    out = _fill(text, room, measure)
    limit = width(text)
    while lines and len(out) > lines and limit > 2:
        limit -= max(1, limit // 20)
        out = _fill(shorten(text, limit), room, measure)
    return out


def _fill(text: str, room: float, measure: Callable[[str], float]) -> list[str]:
    lines, line = [], ""
    for word in text.split(" "):
        joined = f"{line} {word}" if line else word
        if measure(joined) <= room:
            line = joined
            continue
        if line:
            lines.append(line)
        *full, line = _broken(word, room, measure)
        lines += full
    return [*lines, line] if line or not lines else lines


def _broken(word: str, room: float, measure: Callable[[str], float]) -> list[str]:
    """A word cut into lines, after an underscore, hyphen or stroke if there is one near the end of the line."""
    lines = []
    while measure(word) > room and len(word) > 1:
        end = 1
        while measure(word[: end + 1]) <= room:
            end += 1
        marks = [i + 1 for i in range(end // 2, end) if word[i] in "_-/"]
        end = marks[-1] if marks else end
        lines.append(word[:end])
        word = word[end:]
    return [*lines, word]


def label(name: Any, limit: int = 40) -> str:
    """A state's name as printed in a sentence: cleaned and short."""
    return shorten(clean(name), limit)


def listing(names: list[str], limit: int = 6) -> str:
    """ "a, b and c"; a long list ends with how many more there are.

    >>> listing(["a", "b", "c"]), listing(["a", "b", "c"], limit=1)
    ('a, b and c', 'a and 2 more')
    """
    if len(names) > limit:
        return f"{', '.join(names[:limit])} and {len(names) - limit} more"
    return f"{', '.join(names[:-1])} and {names[-1]}" if len(names) > 1 else "".join(names)


def upper_first(text: str) -> str:
    """The text with a capital at its beginning."""
    return text[:1].upper() + text[1:]
