"""A history of states (customer, period, state) into a Tally.

- A customer's first row in the extract's first period: of unknown history; later: joined.
- Rows in an exit after an exit: still gone; they are used and write nothing. A live row after an exit: a return.
- `on_absent`: after a customer's last row, if it is no exit, the next period for which the extract has rows at all
  counts as this exit.
- `on_gap`: periods without a row inside a stay stay empty ("break": the move spans them and is no one-period move),
  take the state before ("carry"), or a named state. Between an exit and a return nothing is filled.
- Two states for one customer and period: the row loaded last counts, else the last in the extract; the others are
  duplicates (superseded), counted and listed. Identical rows are duplicates.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.errors import InputError, listed
from cohortflow.history.accounts import ASIDE, USED
from cohortflow.history.cells import Columns
from cohortflow.history.columns import BLANK, FAULT_OF, IGNORED, UNKNOWN
from cohortflow.history.duplicates import mark_superseded
from cohortflow.history.fetch import ordered
from cohortflow.history.follow import JOINED, LIVE, RETURNED, UNKNOWN_HISTORY, UNSEEN, Followed, blank
from cohortflow.history.labels import period_of_label, refuse_ambiguous
from cohortflow.history.reading import Reading
from cohortflow.history.sweep import Labelled, Sweep, first_rows
from cohortflow.study import Study

MOST_LABELS = 100_000
NO_PERIOD = -(2**31) + 1  # of rows with a fault


def read_state_rows(reading: Reading) -> Sweep:
    """Label and count the loaded rows of a history of states."""
    reading.refuse_missing_ids()
    map_labels(reading)
    has = reading.loaded.has
    if "event_id" in has:
        older = mark_superseded(reading.engine, has_loaded="loaded" in has)
        if older:
            lines = reading.examples(f"fault = {FAULT_OF['superseded']}")
            reading.found("superseded_rows", rows=older, lines=lines)
    first, last, periods = _window(reading)
    layout = HistoryLayout(reading, first, last, periods)
    sweep = Sweep(reading, first=first, last=last, periods=last - first + 1)
    sweep.run(layout)
    return sweep


class HistoryLayout:
    """What a block of rows of a history of states means."""

    def __init__(self, reading: Reading, first: int, last: int, periods: list[int]) -> None:
        self.study, self.first, self.last = reading.study, first, last
        self.has_amount = "amount" in reading.loaded.has
        self.follower = HistoryFollower(reading.study, last - first + 1, np.array(periods) - first)
        self.as_of_period = self._period_of_as_of()
        self.joins = "LEFT JOIN labels USING (label)"
        self.columns = [f"coalesce(p, {NO_PERIOD}) AS p", "code", "h"]
        self.columns += ["coalesce(amount, 0) AS amount"] if self.has_amount else []

    def _period_of_as_of(self) -> int:
        """The period in which the as-of day lies."""
        study = self.study
        if study.as_of is None or study.calendar.kind == "step":
            return 2**31
        return study.calendar.ordinal(study.as_of)

    def label(self, rows: Columns, size: int) -> Labelled:
        """Outcomes and states of a block of `size` customers."""
        outcome = self._outcomes(rows)
        places = np.flatnonzero(outcome == USED)
        order = places[ordered([rows["c"][places], rows["p"][places]], rows["r"][places])[0]]
        last = self._settle(rows, order, outcome)
        periods = self.follower.periods
        at = (rows["p"][last] - self.first, rows["c"][last])
        given = np.full((periods, size), -1, dtype=np.int8)
        given[at] = rows["code"][last]
        amount = None
        if self.has_amount:
            amount = np.zeros(given.shape, dtype=np.int64)
            amount[at] = rows["amount"][last]
        f = self.follower.follow(given)
        superseded = int((outcome[places] == FAULT_OF["superseded"]).sum())
        return Labelled(
            f.state, f.start, f.origin, f.tenure, f.memo, f.memo_state, outcome,
            first=first_rows(last, rows["c"][last], size), used=last, any_exit=f.any_exit, amount=amount,
            notes={"two_states_in_a_period": superseded},
        )  # fmt: skip

    def _outcomes(self, rows: Columns) -> np.ndarray:
        outcome, p, code = rows["fault"].astype(np.int16), rows["p"], rows["code"]
        for reason, where in (
            ("incomplete_period", p > self.last),
            ("after_as_of", p > self.as_of_period),
            ("before_log_start", p < self.first),
            ("unknown_event", code == UNKNOWN),
            ("ignored_event", code == IGNORED),
            ("blank_cell", code == BLANK),
        ):
            outcome[where & (rows["fault"] == 0)] = ASIDE[reason]
        return outcome

    def _settle(self, rows: Columns, order: np.ndarray, outcome: np.ndarray) -> np.ndarray:
        """The row that counts of each customer and period (the last); the others become duplicates."""
        if len(order) == 0:
            return order
        c, p = rows["c"][order], rows["p"][order]
        last = np.append((c[1:] != c[:-1]) | (p[1:] != p[:-1]), True)
        if not last.all():
            run = np.cumsum(last) - last
            crowd = np.flatnonzero(np.isin(run, run[~last]))
            again = crowd[np.lexsort([-rows["r"][order[crowd]], rows["h"][order[crowd]], run[crowd]])]
            h = rows["h"][order[again]]
            same = (run[again][1:] == run[again][:-1]) & (h[1:] == h[:-1])
            outcome[order[~last]] = FAULT_OF["superseded"]
            outcome[order[again[1:][same]]] = FAULT_OF["identical"]
        return order[last]


# ---- periods ----
def map_labels(reading: Reading) -> None:
    """Fill `labels` (label, p); rows whose label cannot be read get a fault."""
    engine, spec = reading.engine, reading.study.input
    found = engine.rows(f"SELECT DISTINCT label FROM rows WHERE fault = 0 ORDER BY 1 LIMIT {MOST_LABELS + 1}")
    texts = [str(r[0]) for r in found]
    if len(texts) > MOST_LABELS:
        raise InputError(
            f'The column "{spec.time}" has more than {MOST_LABELS:,} different periods (such as "{texts[0]}"); a '
            'history has one label a period. For instants use layout = "events".'
        )
    refuse_ambiguous(texts, spec.date_format, f'column "{spec.time}"')
    ordinals = [period_of_label(t, reading.study.calendar, spec.date_format) for t in texts]
    good = [(t, o) for t, o in zip(texts, ordinals, strict=True) if o is not None]
    frame = pd.DataFrame({"label": [t for t, _ in good], "p": np.array([o for _, o in good], dtype=np.int64)})
    engine.register("known_labels", frame.astype({"label": object}))
    engine.run("CREATE TABLE labels AS SELECT label::VARCHAR AS label, p::INTEGER AS p FROM known_labels")
    if len(good) < len(texts):
        fault = FAULT_OF["time_unreadable"]
        engine.run(
            f"UPDATE rows SET fault = {fault} WHERE fault = 0 AND label NOT IN (SELECT label FROM labels)"
        )


def _window(reading: Reading) -> tuple[int, int, list[int]]:
    """(first, last, periods with rows): ordinals of the counted window."""
    study, calendar = reading.study, reading.study.calendar
    periods = list(reading.whole.periods) if reading.whole else periods_present(reading)
    if study.input.log_start is not None and calendar.kind != "step":
        periods = [p for p in periods if p >= calendar.ordinal(study.input.log_start)]
    last = study.last_complete
    kept = [p for p in periods if last is None or p <= last]
    if not kept:
        have = f"its periods are {calendar.label(periods[0])} to {calendar.label(periods[-1])}" if periods else (
            f"no row has a readable period and a known state; the states are {listed(study.states.names)}")  # fmt: skip
        raise InputError(
            f"No row of the history can be used up to as_of ({study.as_of}): {have}. A period looks like "
            f'"{calendar.label(calendar.parse("3") if calendar.kind == "step" else (last or 0))}".'
        )
    if last is not None and kept[-1] < last:
        reading.found("extract_ends_early", last_rows=calendar.label(kept[-1]), as_of=str(study.as_of))
    return kept[0], kept[-1], kept


def periods_present(reading: Reading) -> list[int]:
    """Ordinals of the periods with good rows, ascending."""
    found = reading.engine.rows(
        "SELECT DISTINCT p FROM rows JOIN labels USING (label) WHERE fault = 0 AND code >= 0 ORDER BY 1"
    )
    return [int(r[0]) for r in found]


class HistoryFollower:
    """Stays, exits and returns from given states.

    periods : length of the window;  present : periods (from 0) for which the extract has rows
    """

    def __init__(self, study: Study, periods: int, present: np.ndarray) -> None:
        states, spec = study.states, study.input
        self.periods = periods
        self.is_exit = states.exit_mask
        self.on_absent = states.index(spec.on_absent) if spec.on_absent else -1
        kinds = {"break": -2, "carry": -1}
        self.fill: int = kinds[spec.on_gap] if spec.on_gap in kinds else states.index(spec.on_gap)
        after = np.searchsorted(present, np.arange(periods), side="right")
        self.next_present = np.append(present, periods)[after]

    def follow(self, given: np.ndarray, joined_first: np.ndarray | None = None) -> Followed:
        """Label a block; given (T, B), -1 = no row; joined_first: (B,) known to have joined in the first period."""
        size = given.shape[1]
        out = blank(self.periods, size)
        seen = given >= 0
        last = self.periods - 1 - seen[::-1].argmax(axis=0)
        self._add_absent(given, last)
        where = np.full(size, UNSEEN, dtype=np.int8)
        began = np.zeros(size, dtype=np.int32)
        known = np.zeros(size, dtype=bool)
        before = np.full(size, -1, dtype=np.int8)
        joins = np.zeros(size, dtype=bool) if joined_first is None else joined_first
        for t in range(self.periods):
            state = self._filled(given[t], before, where, t < last)
            here = state >= 0
            exits = here & self.is_exit[state]
            new, gone = (where == UNSEEN) & here, where >= 0
            back = gone & here & ~exits
            at_once = new & exits
            out.state[t] = np.where(here & ~at_once & ~(gone & exits), state, -1)
            known_new = np.full(size, True) if t else joins
            kinds = np.where(known_new, JOINED, UNKNOWN_HISTORY)
            out.start[t] = np.select([at_once, back, new], [-1, RETURNED, kinds], default=-1)
            out.origin[t] = np.where(back, where, -1)
            out.memo[t] = np.where(at_once & known_new, 0, -1)
            out.memo_state[t] = state
            began = np.where(new | back, t, began)
            known = np.where(new, known_new, known | back)
            out.tenure[t] = np.where(known, t - began, -1)
            out.any_exit |= bool(exits.any())
            where = np.where(exits & ~gone, state, np.where(here & ~exits, LIVE, where)).astype(np.int8)
            before = np.where(here, state, before)
        return out

    def _add_absent(self, given: np.ndarray, last: np.ndarray) -> None:
        if self.on_absent < 0:
            return
        who = np.arange(given.shape[1])
        after = self.next_present[last]
        leaves = (after < self.periods) & ~self.is_exit[given[last, who]]
        given[after[leaves], who[leaves]] = self.on_absent

    def _filled(
        self, state: np.ndarray, before: np.ndarray, where: np.ndarray, inside: np.ndarray
    ) -> np.ndarray:
        if self.fill == -2:
            return state
        gap = (state < 0) & (where == LIVE) & inside
        return np.where(gap, before if self.fill == -1 else self.fill, state).astype(np.int8)
