"""Which moves count, and how much: the window, the periods left out, and the halving of weights with age."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, InputError, NotIdentified
from cohortflow.estimator.rows import RowCounts
from cohortflow.tally import Tally


@dataclass(frozen=True)
class Window:
    """The origin periods in use: first..last without `skipped`; weight halves every `half_life` periods."""

    first: int
    last: int
    skipped: tuple[int, ...] = ()
    half_life: float | None = None

    def keeps(self, periods: pd.Series) -> pd.Series:
        """Which origin periods are in use."""
        return periods.between(self.first, self.last) & ~periods.isin(self.skipped)

    def weight(self, periods: np.ndarray) -> np.ndarray:
        """Weight of a move by its origin period; 1 for the latest one.

        >>> Window(0, 10, half_life=5.0).weight(np.array([10, 5, 0])).tolist()
        [1.0, 0.5, 0.25]
        """
        if self.half_life is None:
            return np.ones(len(periods))
        return 0.5 ** ((self.last - np.asarray(periods, dtype=float)) / self.half_life)


def choose_window(
    tally: Tally,
    *,
    window: int | None = None,
    half_life: float | None = None,
    exclude: Iterable[str | int] = (),
) -> Window:
    """The Window of a fit.

    window : number of origin periods, counted back from the latest
    exclude : periods whose moves are left out: the moves INTO them (a move from t to t + 1 happens in t + 1)

    CallError for a window or half-life that is not positive; NotIdentified when no move is left.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"])
    >>> moves = [(t, "fresh", "steady", 5) for t in range(3)]
    >>> tally = cf.read_counts(moves, states)
    >>> choose_window(tally, window=2, exclude=[3])
    Window(first=1, last=2, skipped=(2,), half_life=None)
    """
    if window is not None and window < 1:
        raise CallError(f"window is a number of periods from 1 on; got {window!r}.")
    if half_life is not None and not half_life > 0:
        raise CallError(f"half_life is a positive number of periods; got {half_life!r}.")
    origins = tally.origins()
    if not origins:
        raise NotIdentified(
            "No moves between consecutive periods were counted, so there is nothing to fit; "
            "check the period and the as-of date."
        )
    first = origins[0] if window is None else max(origins[0], origins[-1] - int(window) + 1)
    skipped = tuple(sorted({tally.period(p) - 1 for p in exclude}))
    if not [o for o in origins if o >= first and o not in skipped]:
        raise NotIdentified("The window holds no move that is not excluded; widen `window` or exclude less.")
    return Window(first, origins[-1], skipped, None if half_life is None else float(half_life))


def plain_rows(tally: Tally, window: Window) -> RowCounts:
    """One row a declared state: the counts of one-period moves. Exits have no row of counts.

    InputError when a move declared impossible was counted.
    """
    moves = tally.one_step
    moves = moves[window.keeps(moves["period"])]
    refuse_impossible(tally, moves)
    table = moves.rename(columns={"state": "row", "next_state": "column"})
    case = None
    if tally.meta.weighted:
        case = (moves["weight"] / tally.meta.weight_scale / moves["n"]).to_numpy()
    return RowCounts.of_table(table, tally.states.allowed, window.weight(moves["period"].to_numpy()), case)


def refuse_impossible(tally: Tally, moves: pd.DataFrame) -> None:
    """InputError naming the first move that was counted although it is declared impossible."""
    states = tally.states
    bad = moves[~states.allowed[moves["state"].to_numpy(int), moves["next_state"].to_numpy(int)]]
    if len(bad):
        a, b = states.names[int(bad["state"].iloc[0])], states.names[int(bad["next_state"].iloc[0])]
        why = "exits are absorbing" if a in states.exits else "it is declared impossible"
        raise InputError(
            f'The counts hold {int(bad["n"].sum())} move(s) such as "{a}" to "{b}", but {why}. Correct the '
            "counts, or take the declaration back."
        )
