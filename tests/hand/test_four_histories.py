"""Four customers of a history of states, six steps, every table of the tally written by hand.

         1     2     3       4      5     6
D1       reg   reg   paused  reg    -     reg      there at the first step: unknown history; a gap at 5
D2       -     new   reg     left   -     reg      joins at 2, leaves at 4, is back at 6: a new stay
D3       -     -     new     new    -     -        absent after 4: leaves at 5, the next step that has rows
D4       -     -     -       left   reg   reg      first seen having left: joined_and_left; returns at 5

on_gap = "break", on_absent = "left".

Moves. D1: reg-reg, reg-paused, paused-reg, then reg-reg two steps long over the gap, and reg at the end.
D2: new-reg, reg-left, the exit's row at 4; then reg at the end. D3: new-new, new-left, the exit's row at 5.
D4: reg-reg, and reg at the end.
Contexts (tenure, steps already spent in the state, state one step before; -1 = unknown). D1's tenure is
unknown, and its first spell began before counting: steps 1 and 2 (-1, -1, -1), (-1, -1, reg); paused at 3:
just arrived from reg: (-1, 0, reg). Step 4 is followed by a gap: none. D2: (0, 0, -1), (1, 0, new).
D3: (0, 0, -1), (1, 1, new). D4: (0, 0, -1): the first step of a stay has no state before it.
Ages, from joining or returning on; D1 has none, its beginning is not known.
Steps ahead: D1 is not seen at 5, so 4 steps from 1, 3 from 2, 2 from 3 and 1 from 4 are missing. D2's exit
is kept though D2 comes back at 6: from 2 at 4 steps and from 3 at 3 steps it is left.
Amounts, in cents, one customer and step at a time: D1 1000, 1000, none, 750, -, 250; D2 500, 500, -300, -,
100; D3 400, 400 and nothing in the step of its exit; D4 900 in the step of its memo (not counted), 600, 600.
At step 6: 250 + 100 + 600 = 950; squares 62,500 + 10,000 + 360,000 = 432,500.
"""

from __future__ import annotations

import pandas as pd
import pytest

import cohortflow as cf
import cohortflow.study as parts
from cohortflow.tally import ENDS, KINDS, MEMOS
from tests.oracle import tell

STATES = cf.States(["new", "reg", "paused", "left"], exits=["left"], entries=["new"], away=["paused"])
NEW, REG, PAUSED, LEFT = range(4)
MOVED, AS_OF, EXIT, UNSEEN = range(4)
ROWS = [
    ("D1", 1, "reg", 10.00), ("D1", 2, "reg", 10.00), ("D1", 3, "paused", None), ("D1", 4, "reg", 7.50),
    ("D1", 6, "reg", 2.50),
    ("D2", 2, "new", 5.00), ("D2", 3, "reg", 5.00), ("D2", 4, "left", -3.00), ("D2", 6, "reg", 1.00),
    ("D3", 3, "new", 4.00), ("D3", 4, "new", 4.00),
    ("D4", 4, "left", 9.00), ("D4", 5, "reg", 6.00), ("D4", 6, "reg", 6.00),
]  # fmt: skip
FRAME = pd.DataFrame(ROWS, columns=["customer", "period", "state", "amount"])
WRITTEN = {
    "moves": {
        (1, 1, MOVED, REG, REG): 1, (2, 1, MOVED, REG, PAUSED): 1, (3, 1, MOVED, PAUSED, REG): 1,
        (4, 2, MOVED, REG, REG): 1,
        (2, 1, MOVED, NEW, REG): 1, (3, 1, MOVED, REG, LEFT): 1, (4, 0, EXIT, LEFT, -1): 1,
        (3, 1, MOVED, NEW, NEW): 1, (4, 1, MOVED, NEW, LEFT): 1, (5, 0, EXIT, LEFT, -1): 1,
        (5, 1, MOVED, REG, REG): 1, (6, 0, AS_OF, REG, -1): 3,
    },
    "starts": {
        (1, REG, KINDS.index("unknown"), -1): 1, (2, NEW, KINDS.index("joined"), -1): 1,
        (3, NEW, KINDS.index("joined"), -1): 1, (5, REG, KINDS.index("returned"), LEFT): 1,
        (6, REG, KINDS.index("returned"), LEFT): 1,
    },
    "memos": {(4, MEMOS.index("joined_and_left"), LEFT): 1},
    "contexts": {
        (1, -1, -1, -1, REG, REG): 1, (2, -1, -1, REG, REG, PAUSED): 1, (3, -1, 0, REG, PAUSED, REG): 1,
        (2, 0, 0, -1, NEW, REG): 1, (3, 1, 0, NEW, REG, LEFT): 1,
        (3, 0, 0, -1, NEW, NEW): 1, (4, 1, 1, NEW, NEW, LEFT): 1, (5, 0, 0, -1, REG, REG): 1,
    },
    "ages": {
        (2, 0, 0, NEW): 1, (2, 0, 1, REG): 1, (2, 0, 2, LEFT): 1,
        (3, 0, 0, NEW): 1, (3, 0, 1, NEW): 1, (3, 0, 2, LEFT): 1,
        (5, 1, 0, REG): 1, (5, 1, 1, REG): 1, (6, 1, 0, REG): 1,
    },
    "steps": {
        (1, 1, REG, REG): 1, (1, 2, REG, PAUSED): 1, (1, 3, REG, REG): 1, (1, 5, REG, REG): 1,
        (2, 1, REG, PAUSED): 1, (2, 2, REG, REG): 1, (2, 4, REG, REG): 1,
        (3, 1, PAUSED, REG): 1, (3, 3, PAUSED, REG): 1, (4, 2, REG, REG): 1,
        (2, 1, NEW, REG): 1, (2, 2, NEW, LEFT): 1, (2, 3, NEW, LEFT): 1, (2, 4, NEW, LEFT): 1,
        (3, 1, REG, LEFT): 1, (3, 2, REG, LEFT): 1, (3, 3, REG, LEFT): 1,
        (3, 1, NEW, NEW): 1, (3, 2, NEW, LEFT): 1, (3, 3, NEW, LEFT): 1,
        (4, 1, NEW, LEFT): 1, (4, 2, NEW, LEFT): 1, (5, 1, REG, REG): 1,
    },
    "amounts": {
        (1, REG): (1, 1000, 1_000_000), (2, REG): (1, 1000, 1_000_000), (2, NEW): (1, 500, 250_000),
        (3, PAUSED): (1, 0, 0), (3, REG): (1, 500, 250_000), (3, NEW): (1, 400, 160_000),
        (4, REG): (1, 750, 562_500), (4, LEFT): (1, -300, 90_000), (4, NEW): (1, 400, 160_000),
        (5, LEFT): (1, 0, 0), (5, REG): (1, 600, 360_000), (6, REG): (3, 950, 432_500),
    },
}  # fmt: skip


def keyed(name, table):
    """The table as {key: n or values}, buckets and segments summed out."""
    values = [c for c in ("n", "total", "squares") if c in table]
    keys = [c for c in table.columns if c not in (*values, "bucket", "segment", "weight")]
    sums = table.groupby(keys, as_index=False)[values].sum()
    single = len(values) == 1
    return {
        tuple(int(row[k]) for k in keys): int(row["n"]) if single else tuple(int(row[v]) for v in values)
        for row in sums.to_dict("records")
    }


def test_ends_are_in_the_order_used_here():
    assert ENDS == ("moved", "as_of", "exit", "unseen")


@pytest.mark.parametrize("name", WRITTEN)
def test_history_room(name):
    columns = {"customer": "customer", "period": "period", "state": "state", "amount": "amount"}
    tally = cf.count(cf.read_history(FRAME, STATES, on_absent="left", **columns))
    assert keyed(name, tally.table(name)) == WRITTEN[name]


@pytest.mark.parametrize("name", WRITTEN)
def test_oracle(name):
    spec = parts.InputSpec(layout="history", time="period", state="state", amount="amount", on_absent="left")
    study = parts.Study(STATES, cf.Calendar("step"), input=spec)
    rows = [{c: "" if pd.isna(v) else str(v) for c, v in row.items()} for row in FRAME.to_dict("records")]
    assert keyed(name, tell(study, rows).tables()[name]) == WRITTEN[name]
