"""The models by name, and the two that need no expanded states: plain and recent."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from cohortflow.errors import CallError, listed, nearest
from cohortflow.estimator.layout import Built, Part, build, with_exits
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.window import Window
from cohortflow.states import States
from cohortflow.tally import Tally

Builder = Callable[..., Built]


def plain(tally: Tally, window: Window, rates: RowCounts) -> Built:
    """One matrix, the pooled rates."""
    states = tally.states
    return build(
        states,
        tally.calendar,
        rates,
        (plain_part(states),),
        first=tally.meta.last,
        unknown=unknown_states(rates, states),
        settings={"effective_n": rates.effective.tolist()},
    )


def plain_part(states: States, *, name: str = "all") -> Part:
    """The part that holds the (K, K) rates as they are."""
    eye = np.eye(len(states))
    exits = states.exit_mask
    return Part(lambda r: with_exits(r, exits)[..., None, :, :], np.arange(len(states)), eye, eye, name=name)


def unknown_states(rates: RowCounts, states: States) -> tuple[str, ...]:
    """States other than exits from which no departure was counted."""
    return tuple(
        n for n, r in zip(states.names, rates.at_risk, strict=True) if r == 0 and n in states.remaining
    )


MODELS: dict[str, Builder] = {"plain": plain}


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
