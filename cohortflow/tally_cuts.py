"""Cutting a tally back to a past origin, for back-tests: arithmetic on the counts alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from cohortflow.tally import ENDS, KINDS, Tally


def cut_back(tally: Tally, origin: int) -> Tally:
    """The tally as it stood when `origin` was the last complete period (see Tally.at_origin)."""
    t = tally.tables
    ages, steps, contexts = t["ages"], t["steps"], t["contexts"]
    cut = {
        "moves": _cut_moves(t["moves"], origin),
        "starts": t["starts"][t["starts"]["period"] <= origin],
        "contexts": contexts[contexts["period"] < origin],
        "ages": ages[ages["joined"] + ages["age"] <= origin],
        "steps": steps[steps["period"] + steps["k"] <= origin],
        "paths": _cut_paths(t["paths"], origin),
        "amounts": t["amounts"][t["amounts"]["period"] <= origin],
        "memos": t["memos"][t["memos"]["period"] <= origin],
    }
    first_starts = cut["starts"][cut["starts"]["kind"] != KINDS.index("returned")]
    meta = replace(
        tally.meta,
        last=origin,
        customers=int(first_starts["n"].sum()),
        tables=tuple(n for n in tally.meta.tables if n not in ("spells", "silences")),
    )
    return Tally.build(meta, cut)


def _cut_moves(moves: pd.DataFrame, origin: int) -> pd.DataFrame:
    kept = moves[moves["period"] <= origin].copy()
    is_exit = kept["end"] == ENDS.index("exit")
    later = (kept["period"] + kept["gap"] > origin) & ~is_exit
    at_edge = (kept["period"] == origin) & ~is_exit
    kept.loc[later | at_edge, ["gap", "next_state"]] = [0, -1]
    kept.loc[later, "end"] = ENDS.index("unseen")
    kept.loc[at_edge, "end"] = ENDS.index("as_of")
    return kept


def _cut_paths(paths: pd.DataFrame, origin: int) -> pd.DataFrame:
    texts = [cut_path(p, origin) for p in paths["path"]]
    kept = np.array([bool(text) for text in texts], dtype=bool)
    return paths.assign(path=texts)[kept]


def cut_path(path: str, origin: int) -> str:
    """A run-length path up to and including period `origin`; empty when it starts later.

    >>> cut_path("10 2*3 -*2 0*4", 15)
    '10 2*3 -*2 0*1'
    >>> cut_path("10 2*3 -*2 0*4", 13)
    '10 2*3'
    """
    first, *runs = path.split(" ")
    left = origin - int(first) + 1
    out: list[str] = []
    for run in runs:
        if left <= 0:
            break
        state, length = run.split("*")
        out.append(f"{state}*{min(int(length), left)}")
        left -= int(length)
    while out and out[-1].startswith("-"):
        out.pop()
    return " ".join([first, *out]) if out else ""
