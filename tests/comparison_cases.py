"""Small runs for tests of comparisons, from histories written as strings of states."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pandas as pd

import cohortflow as cf
from cohortflow.runs.opened import OpenRun
from cohortflow.runs.steps import joiners_study
from cohortflow.study import Study
from cohortflow.study.parts import InputSpec, JoinerSpec

STATES = cf.States(["here", "away", "gone"], exits=["gone"], away=["away"], entries=["here"])
LETTERS = {"h": "here", "a": "away", "g": "gone"}
PLAIN = Study(
    STATES, cf.Calendar("step"), horizon=2, joiners=JoinerSpec("none"), input=InputSpec(segments=("town",))
)

STUDY = """\
[study]
title = "small"
period = "step"
horizon = 3
[input]
layout = "history"
files = ["panel.csv"]
customer = "customer"
time = "period"
state = "state"
segments = ["town"]
[[state]]
name = "here"
role = "entry"
[[state]]
name = "away"
role = "away"
[[state]]
name = "gone"
role = "exit"
[joiners]
method = "constant"
[value]
currency = "GBP"
per_period = { here = 10.0 }
[totals]
known = ["here", "away"]
"""


def rows(paths: dict[str, int], *, last: int) -> pd.DataFrame:
    """customer, period, state, town: so many customers of each path; "2.hhg@north" starts in period 2."""
    out = []
    for number, (path, count) in enumerate(paths.items()):
        start, _, rest = path.rpartition(".")
        letters, _, town = rest.partition("@")
        for k in range(count):
            out += [
                (f"{number}-{k}", int(start or 0) + t, LETTERS[letter], town or "south")
                for t, letter in enumerate(letters)
                if int(start or 0) + t <= last
            ]
    return pd.DataFrame(out, columns=["customer", "period", "state", "town"])


def tally(paths: dict[str, int], *, last: int) -> cf.Tally:
    """The counts of these paths up to a period."""
    return cf.count(cf.read_history(rows(paths, last=last), STATES, segments=["town"]))


def opened(counts: cf.Tally, study: Study = PLAIN, *, name: str = "run", by: str | None = None) -> OpenRun:
    """The run of a study on counts, without a folder."""
    study = replace(study, states=counts.states, calendar=counts.calendar)
    from cohortflow.runs.drivers import Hand

    fit = Hand.of(study, counts, by).fit(counts)
    ahead = cf.project(
        fit, periods=study.horizon, joiners=joiners_study(study, counts), totals=study.totals, level=study.level,
        rng=1, draws=20, adjustments=study.adjustments,
    )  # fmt: skip
    record = {"definitions": study.digest(), "study": study.to_dict(), "program": {"version": "0"}}
    return OpenRun(name, record, study, counts, by, ahead.to_frame(), ahead.rollforward)


def folder(home: Path, name: str, paths: dict[str, int], *, last: int, text: str = STUDY) -> Path:
    """A run folder made up to the projection."""
    (home / "in").mkdir(exist_ok=True)
    rows(paths, last=last).to_csv(home / "in" / "panel.csv", index=False)
    (home / "in" / "small.toml").write_text(text)
    done = cf.run(home / "in" / "small.toml", upto="project", out=home / name)
    assert done.path is not None
    return done.path
