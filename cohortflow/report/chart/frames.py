"""What charts and tables take: a record or its frame, one segment at a time, with the roles of the states."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, listed, nearest
from cohortflow.states import States

ALL = "all"


def frame_of(result: Any, columns: Iterable[str], *, segment: str = ALL) -> pd.DataFrame:
    """The tidy frame of a record, or the frame itself, cut to one segment.

    CallError when a column that is needed is missing or the segment is unknown.

    >>> frame_of(pd.DataFrame({"segment": ["all"], "value": [1.0]}), ["value"])["value"].tolist()
    [1.0]
    """
    frame = result if isinstance(result, pd.DataFrame) else getattr(result, "to_frame", lambda: None)()
    if not isinstance(frame, pd.DataFrame):
        raise CallError(f"Expected a record or a DataFrame to draw; got {type(result).__name__}.")
    lacking = [c for c in columns if c not in frame.columns]
    if lacking:
        raise CallError(f"The table lacks {listed(lacking)}; it has {listed(frame.columns)}.")
    if "segment" not in frame.columns:
        return frame
    known = [str(s) for s in pd.unique(frame["segment"])]
    if segment == ALL and ALL not in known and len(known) == 1:
        segment = known[0]
    if segment not in known:
        raise CallError(
            f'There is no segment "{segment}"{nearest(segment, known)}; there are {listed(known)}.'
        )
    return frame[frame["segment"] == segment].reset_index(drop=True)


def transitions_of(result: Any, *, segment: str = ALL, level: float | None = None) -> pd.DataFrame:
    """The `transitions` rows of a Fit (asked for its intervals), of Intervals, or of a frame."""
    if not isinstance(result, pd.DataFrame) and hasattr(result, "interval"):
        result = result.interval(level=level) if level else result.interval()
    columns = ["from", "to", "count", "at_risk", "probability", "low", "high"]
    return frame_of(result, columns, segment=segment)


def states_of(result: Any, states: States | None, frame: pd.DataFrame) -> States:
    """The states as given, those of the record, or what the moves in the frame tell (exits are never left)."""
    known = states or getattr(result, "states", None)
    if known is not None:
        return known
    names = [str(n) for n in pd.unique(pd.concat([frame["from"], frame["to"]]))]
    gone = frame[(frame["count"] > 0) & (frame["from"] != frame["to"])]["from"]
    return States(names, exits=[n for n in names if n not in set(gone)])


def square(frame: pd.DataFrame, column: str, names: Sequence[str]) -> np.ndarray:
    """(K, K) values of one column, row = from; NaN where the frame has no row."""
    wide = frame.pivot(index="from", columns="to", values=column)
    return wide.reindex(index=list(names), columns=list(names)).to_numpy(dtype=float)


def clear_winner(values: np.ndarray, low: np.ndarray, high: np.ndarray) -> int | None:
    """Position of the largest value if its interval lies above every other interval, else None.

    Charts say "the most" only when this finds one.

    >>> clear_winner(np.array([0.3, 0.1]), np.array([0.25, 0.05]), np.array([0.35, 0.2]))
    0
    >>> clear_winner(np.array([0.3, 0.28]), np.array([0.25, 0.2]), np.array([0.35, 0.33])) is None
    True
    """
    usable = np.flatnonzero(~np.isnan(values))
    if not len(usable):
        return None
    best = usable[int(np.argmax(values[usable]))]
    others = [i for i in usable if i != best]
    rivals = np.where(np.isnan(high[others]), values[others], high[others])
    bottom = values[best] if np.isnan(low[best]) else low[best]
    return int(best) if not len(others) or bottom > rivals.max() else None
