"""Bare transition counts (period, from, to, n) into a Tally of moves alone."""

from __future__ import annotations

import hashlib
import json
import re

import numpy as np
import pandas as pd

from cohortflow.errors import InputError
from cohortflow.history.labels import period_of_label
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import ENDS, Meta, Tally


def tally_of_counts(
    rows: pd.DataFrame,
    states: States,
    *,
    calendar: str | Calendar | None = None,
    definitions: str | None = None,
) -> Tally:
    """The Tally of rows period, from, to, n; InputError names the first row that cannot be used.

    rows(t, j): those that start a move there, and in the last period those that arrive; an exit is written once, in
    the period of leaving.
    """
    if rows.empty:
        raise InputError("The counts hold no rows; give rows of period, from, to, n.")
    known = _calendar(rows["period"], calendar)
    period = np.array([_period(v, known, i) for i, v in enumerate(rows["period"])], dtype=np.int64)
    origin, target = (_states(rows[c], states, c) for c in ("from", "to"))
    n = np.array([_whole(v, i) for i, v in enumerate(rows["n"])], dtype=np.int64)
    out_of_exit = states.exit_mask[origin] & (origin != target) & (n > 0)
    if out_of_exit.any():
        i = int(out_of_exit.argmax())
        raise InputError(
            f'Row {i + 1} of the counts is a move out of the exit "{states.names[origin[i]]}". An exit is left only '
            "by a return, which starts a new stay: leave such rows out."
        )
    kept = ~states.exit_mask[origin] & (n > 0)
    return _tally(period[kept], origin[kept], target[kept], n[kept], states, known, definitions)


def _tally(
    period: np.ndarray,
    origin: np.ndarray,
    target: np.ndarray,
    n: np.ndarray,
    states: States,
    calendar: Calendar,
    definitions: str | None,
) -> Tally:
    if len(period) == 0:
        raise InputError("The counts are all zero; give the numbers of customers that moved.")
    broken = ~states.allowed[origin, target]
    if broken.any():
        i = int(broken.argmax())
        pair = f'"{states.names[origin[i]]}" to "{states.names[target[i]]}"'
        raise InputError(
            f"The counts hold the move {pair}, which is declared impossible; correct one of the two."
        )
    first, last = int(period.min()), int(period.max()) + 1
    exits = states.exit_mask[target]
    stay = (period + 1 == last) & ~exits
    parts = [
        (period, origin, target, n, 1, "moved"),
        (period[exits] + 1, target[exits], -1, n[exits], 0, "exit"),
        (period[stay] + 1, target[stay], -1, n[stay], 0, "as_of"),
    ]
    frames = [
        pd.DataFrame(
            {"bucket": 0, "segment": 0, "period": p, "gap": gap, "end": ENDS.index(end), "state": s, "next_state": j,
             "n": m, "weight": m}
        )
        for p, s, j, m, gap, end in parts
    ]  # fmt: skip
    meta = Meta(
        states=states,
        calendar=calendar,
        first=first,
        last=last,
        customers=int(n[period == first].sum()),
        definitions=definitions or _digest(states, calendar),
        bucket_bits=0,
        tables=("moves",),
    )
    return Tally.build(meta, {"moves": pd.concat(frames, ignore_index=True)})


def _digest(states: States, calendar: Calendar) -> str:
    roles = [(name, states.role(name)) for name in states.names]
    text = json.dumps([roles, sorted(states.impossible), calendar.kind, calendar.fiscal_year_start])
    return hashlib.sha256(text.encode()).hexdigest()


def _calendar(periods: pd.Series, given: str | Calendar | None) -> Calendar:
    if isinstance(given, Calendar):
        return given
    if given is not None:
        return Calendar(given)
    whole = all(re.fullmatch(r"-?\d{1,4}", str(v).strip()) for v in periods)
    return Calendar("step" if whole else "month")


def _period(value: object, calendar: Calendar, row: int) -> int:
    found = period_of_label(str(value), calendar)
    if found is None:
        raise InputError(
            f'Row {row + 1} of the counts has the period "{value}", which is no {calendar.kind}. '
            'Name the kind of period, for instance calendar="quarter", or correct the row.'
        )
    return found


def _states(values: pd.Series, states: States, column: str) -> np.ndarray:
    place = {name: i for i, name in enumerate(states.names)}
    unknown = [v for v in dict.fromkeys(values) if str(v).strip() not in place]
    if unknown:
        states.index(str(unknown[0]))  # raises, with the nearest name
    del column
    return np.array([place[str(v).strip()] for v in values], dtype=np.int64)


def _whole(value: object, row: int) -> int:
    try:
        number = float(str(value))
    except ValueError:
        number = -1.0
    if not (number >= 0 and number == int(number) and number < 2**53):
        raise InputError(
            f'Row {row + 1} of the counts has n = "{value}"; n is a whole number of customers, 0 or more.'
        )
    return int(number)
