"""The models by name, and the two that need no expanded states: plain and recent."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from cohortflow.errors import CallError, listed, nearest
from cohortflow.estimator.gaps import with_gaps
from cohortflow.estimator.layout import Built, Part, build, with_exits
from cohortflow.estimator.mixture import mixture, mover_stayer
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.seasonal import seasonal
from cohortflow.estimator.second_order import second_order
from cohortflow.estimator.segment import segment
from cohortflow.estimator.tenure import tenure
from cohortflow.estimator.time_in_state import time_in_state
from cohortflow.estimator.window import Window
from cohortflow.states import States
from cohortflow.tally import Tally

Builder = Callable[..., Built]

DEFAULT_WINDOW = 12


def plain(tally: Tally, window: Window, rates: RowCounts, *, gaps: str = "drop") -> Built:
    """One matrix, the pooled rates; gaps="em" also uses pairs of rows with periods missing between (gaps.py)."""
    states = tally.states
    rates, notes = with_gaps(tally, window, rates, gaps)
    eye, exits = np.eye(len(states)), states.exit_mask
    part = Part(lambda r: with_exits(r, exits)[..., None, :, :], np.arange(len(states)), eye, eye)
    return build(
        tally, rates, (part,), rates=rates, notes=notes, settings={"effective_n": _by_state(rates, states)}
    )


def recent_window(tally: Tally, window: int | None, half_life: float | None) -> dict[str, Any]:
    """The choice of `recent` where neither is given: the last full cycle, or 12 periods without one."""
    if window is None and half_life is None:
        return {
            "window": tally.calendar.cycle if tally.calendar.cycle > 1 else DEFAULT_WINDOW,
            "half_life": None,
        }
    return {"window": window, "half_life": half_life}


def _by_state(rates: RowCounts, states: States) -> dict[str, float]:
    return {n: float(e) for n, e in zip(states.names, rates.effective, strict=True) if n in states.remaining}


MODELS: dict[str, Builder] = {
    "plain": plain,
    "recent": plain,  # the same rates; `fit` gives it a window or a half-life
    "seasonal": seasonal,
    "tenure": tenure,
    "time_in_state": time_in_state,
    "segment": segment,
    "second_order": second_order,
    "mover_stayer": mover_stayer,
    "mixture": mixture,
}


def build_model(
    model: str,
    tally: Tally,
    window: Window,
    rates: RowCounts,
    *,
    by: str | None,
    options: Mapping[str, Any],
) -> Built:
    """Call the model's builder after checking the options it takes."""
    builder = MODELS[model]
    taken = set(inspect.signature(builder).parameters) - {"tally", "window", "rates"}
    given = dict(options)
    if "by" in taken:
        given["by"] = by
    for name in given:
        if name not in taken:
            known = listed(sorted(taken)) if taken else "none"
            raise CallError(
                f'The {model} model takes no option "{name}"{nearest(name, taken)}. Its options: {known}.'
            )
    return builder(tally, window, rates, **given)
