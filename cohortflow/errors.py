"""Every way in which the program refuses.

    CohortflowError               what came, where, what is allowed, what to do next
    ├── InputError                the data cannot be read or trusted as they are
    │   └── DefinitionsDiffer     two things that must share definitions do not
    ├── StudyError                the study file is not valid
    ├── CallError                 a library call or command got arguments it cannot use (also a ValueError)
    ├── NotIdentified             the quantity is not defined, or the data do not determine it
    └── OutputError               the result cannot be written where it was asked for

Each class carries a `slug`: a stable code for machines, printed in front of the message by the command line.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class CohortflowError(Exception):
    """Base of all refusals; `str(error)` is a message for the person who called."""

    slug = "refused"


class InputError(CohortflowError):
    """The data cannot be read, or cannot be trusted as they are."""

    slug = "input"


class DefinitionsDiffer(InputError):
    """Two tallies or runs were made under different definitions and must not be mixed."""

    slug = "definitions"


class StudyError(CohortflowError):
    """The study file is not valid; the message names file, table and key."""

    slug = "study"


class CallError(CohortflowError, ValueError):
    """A call got an argument that it cannot use."""

    slug = "call"


class NotIdentified(CohortflowError):
    """The quantity is undefined for this chain, or these data do not determine it; the message says why."""

    slug = "not_identified"


class OutputError(CohortflowError):
    """The result cannot be written where it was asked for."""

    slug = "output"


def nearest(name: object, known: Iterable[str]) -> str:
    """A hint ` (did you mean "..."?)` for the known name closest to `name`, or an empty string.

    >>> nearest("cancled", ["joined", "cancelled"])
    ' (did you mean "cancelled"?)'
    """
    by_folded = {k.strip().casefold(): k for k in known}
    close = difflib.get_close_matches(str(name).strip().casefold(), by_folded, n=1, cutoff=0.6)
    return f' (did you mean "{by_folded[close[0]]}"?)' if close else ""


def listed(names: Iterable[object], limit: int = 12) -> str:
    """`"a", "b", "c"` for messages; a long list is cut and says how many more there are.

    >>> listed(["paused", "weekly", "quiet"], limit=2)
    '"paused", "weekly" and 1 more'
    """
    quoted = [f'"{n}"' for n in names]
    if len(quoted) <= limit:
        return ", ".join(quoted) if quoted else "none"
    return ", ".join(quoted[:limit]) + f" and {len(quoted) - limit} more"
