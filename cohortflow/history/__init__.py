"""The only room that sees customers: extracts in, a Tally out.

door.py      the public calls                 reading.py   what the layouts share; History
engine.py    the embedded engine              sources.py   files and frames;  dialect.py, lines.py
load.py      one typed table of rows;  columns.py, times.py   duplicates.py
cells.py     a cell a customer and period     customers.py hash buckets, segments
rules.py     the rules on arrays              follow.py    events into states, stays, exits, returns
tabulate.py  states into tables;  adder.py, paths.py        sweep.py  block by block
look.py      an extract before there is a study: profile.py, guess.py, places.py
check.py     accounting and findings          store.py     the Tally on disk
"""

from cohortflow.history.check import Check, Finding
from cohortflow.history.door import (
    count,
    read,
    read_counts,
    read_events,
    read_history,
    read_spells,
    read_wide,
)
from cohortflow.history.reading import History, InputFile
from cohortflow.history.store import load_tally, save_tally

__all__ = [
    "Check",
    "Finding",
    "History",
    "InputFile",
    "count",
    "load_tally",
    "read",
    "read_counts",
    "read_events",
    "read_history",
    "read_spells",
    "read_wide",
    "save_tally",
]
