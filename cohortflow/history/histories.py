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
from cohortflow.history.cells import ROWID_BITS
from cohortflow.history.columns import FAULT_OF, IGNORED, UNKNOWN
from cohortflow.history.customers import Customers, make_customers
from cohortflow.history.duplicates import mark
from cohortflow.history.follow import JOINED, LIVE, RETURNED, UNKNOWN_HISTORY, UNSEEN, Followed, blank
from cohortflow.history.labels import period_of_label, refuse_ambiguous
from cohortflow.history.reading import Reading
from cohortflow.history.sweep import Sweep, block_size, by_block
from cohortflow.study import Study

MOST_LABELS = 100_000
CODES = 256  # more than there are states


def read_state_rows(reading: Reading) -> Sweep:
    """Label and count the loaded rows of a history of states."""
    engine = reading.engine
    reading.refuse_missing_ids()
    map_labels(reading)
    first, last, periods = _window(reading)
    reading.outcome = _outcome_sql(reading, last)
    engine.run("CREATE TABLE IF NOT EXISTS aside_rows (r BIGINT)")
    _settle_conflicts(reading)
    sweep = Sweep(reading, first=first, last=last)
    parts = max(1, -(-reading.loaded.rows // 6_000_000))
    sweep.expect(parts, f"{reading.outcome} = 0")
    follower = HistoryFollower(reading.study, last - first + 1, np.array(periods) - first)
    any_exit = False
    for k in range(parts):
        used = f"{reading.outcome} = 0" + ("" if parts == 1 else f" AND hash(customer) % {parts} = {k}")
        any_exit |= _part(reading, sweep, follower, used)
        reading.progress("labelling", (k + 1) / parts)
    sweep.refuse_without_exits(any_exit)
    return sweep


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


def _outcome_sql(reading: Reading, last: int) -> str:
    """Outcome code of a row, its period looked up by label (few labels)."""
    study, calendar = reading.study, reading.study.calendar
    known = reading.engine.rows("SELECT label, p FROM labels")
    reading.engine.run("CREATE TABLE label_outcomes (label VARCHAR, o INTEGER)")
    out = []
    start = study.input.log_start
    for label, p in known:
        if start is not None and calendar.kind != "step" and p < calendar.ordinal(start):
            out.append((label, 42))
        elif p > last and study.as_of is not None and calendar.kind != "step":
            out.append((label, 43 if calendar.start(p) > study.as_of else 44))
    if out:
        reading.engine.connection.executemany("INSERT INTO label_outcomes VALUES (?, ?)", out)
    late = "coalesce((SELECT o FROM label_outcomes AS l WHERE l.label = rows.label), 0)" if out else "0"
    return (
        f"(CASE WHEN fault > 0 THEN fault::INTEGER WHEN code = {IGNORED} THEN 40 WHEN code = {UNKNOWN} THEN 41 "
        f"ELSE {late} END)"
    )


# ---- two rows for one customer and period ----
def _settle_conflicts(reading: Reading) -> None:
    engine, has = reading.engine, reading.loaded.has
    loaded = "loaded" if "loaded" in has else "''"
    own_id = "coalesce(event_id, '')" if "event_id" in has else "''"
    base = f"SELECT rows.rowid AS r, customer, p, h, {loaded} AS loaded, {own_id} AS event_id FROM rows " \
           f"JOIN labels USING (label) WHERE {reading.outcome} = 0"  # fmt: skip
    many = engine.one(
        f"SELECT count(*) FROM (SELECT customer, p FROM ({base}) GROUP BY 1, 2 HAVING count(*) > 1)"
    )
    if many:
        found = engine.connection.execute(
            f"WITH base AS ({base}) SELECT base.* FROM base JOIN (SELECT customer, p FROM base GROUP BY 1, 2 "
            "HAVING count(*) > 1) USING (customer, p) ORDER BY r"
        ).df()
        same = found.duplicated(subset=["customer", "p", "h"], keep="last")
        mark(engine, found.loc[same, "r"].to_numpy(), "identical")
        rest = found[~same].sort_values(["loaded", "r"], kind="stable")
        older = rest.loc[rest.duplicated(subset=["customer", "p"], keep="last"), "r"].to_numpy()
        mark(engine, older, "superseded")
        if len(older):
            reading.found("two_states_in_a_period", rows=len(older), lines=reading.shown(older))


# ---- customers ----
def _part(reading: Reading, sweep: Sweep, follower: HistoryFollower, used: str) -> bool:
    engine, has = reading.engine, reading.loaded.has
    first_rows = "seg" in has or "weight" in has
    columns = [f"max(rows.rowid * {CODES} + code) % {CODES} AS state"]
    columns += ["coalesce(sum(amount), 0)::BIGINT AS amount"] if "amount" in has else []
    columns += [f"min(p::HUGEINT * {1 << ROWID_BITS} + rows.rowid) AS origin"] if first_rows else []
    engine.drop("cells")
    engine.run(
        f"CREATE TABLE cells AS SELECT customer, p, {', '.join(columns)} FROM rows JOIN labels USING (label) "
        f"WHERE {used} GROUP BY 1, 2"
    )
    customers = make_customers(
        engine, weighted="weight" in has, segmented="seg" in has, segments=sweep.segments
    )
    sweep.begin(customers)
    money = ", amount" if "amount" in has else ""
    cells = engine.arrays(
        f"SELECT c::INTEGER AS c, (p - {sweep.first})::INTEGER AS p, state::TINYINT AS state{money} FROM cells "
        "JOIN customers USING (customer)"
    )
    engine.drop("cells", "customers")
    return _blocks(sweep, follower, customers, cells)


def _blocks(
    sweep: Sweep, follower: HistoryFollower, customers: Customers, cells: dict[str, np.ndarray]
) -> bool:
    size, any_exit = block_size(follower.periods), False
    cuts, order = by_block(cells["c"], size, len(customers))
    for k in range(len(cuts) - 1):
        begin, end = k * size, min((k + 1) * size, len(customers))
        mine = order[cuts[k] : cuts[k + 1]]
        at = (cells["p"][mine], cells["c"][mine] - begin)
        given = np.full((follower.periods, end - begin), -1, dtype=np.int8)
        given[at] = cells["state"][mine]
        amount = None
        if "amount" in cells:
            amount = np.zeros(given.shape, dtype=np.int64)
            amount[at] = cells["amount"][mine]
        f = follower.follow(given)
        any_exit |= f.any_exit
        arrays = (f.state, f.start, f.origin, f.tenure, f.memo, f.memo_state)
        sweep.tabulate(sweep.block(*arrays, begin=begin, end=end, amount=amount))
    return any_exit


class HistoryFollower:
    """Stays, exits and returns from given states.

    periods : length of the window;  present : periods (from 0) for which the extract has rows
    """

    def __init__(self, study: Study, periods: int, present: np.ndarray) -> None:
        states, spec = study.states, study.input
        self.periods = periods
        self.is_exit = states.exit_mask
        self.on_absent = states.index(spec.on_absent) if spec.on_absent else -1
        self.fill = {"break": -2, "carry": -1}.get(spec.on_gap)
        if self.fill is None:
            self.fill = states.index(spec.on_gap)
        after = np.searchsorted(present, np.arange(periods), side="right")
        self.next_present = np.append(present, periods)[after]

    def follow(self, given: np.ndarray) -> Followed:
        """Label a block; given (T, B), -1 = no row."""
        size = given.shape[1]
        out = blank(self.periods, size)
        seen = given >= 0
        last = self.periods - 1 - seen[::-1].argmax(axis=0)
        self._add_absent(given, last)
        where = np.full(size, UNSEEN, dtype=np.int8)
        began = np.zeros(size, dtype=np.int32)
        known = np.zeros(size, dtype=bool)
        before = np.full(size, -1, dtype=np.int8)
        for t in range(self.periods):
            state = self._filled(given[t], before, where, t < last)
            here = state >= 0
            exits = here & self.is_exit[state]
            new, gone = (where == UNSEEN) & here, where >= 0
            back = gone & here & ~exits
            at_once = new & exits
            out.state[t] = np.where(here & ~at_once & ~(gone & exits), state, -1)
            first_kind = UNKNOWN_HISTORY if t == 0 else JOINED
            out.start[t] = np.select([at_once, back, new], [-1, RETURNED, first_kind], default=-1)
            out.origin[t] = np.where(back, where, -1)
            out.memo[t] = np.where(at_once & (t > 0), 0, -1)
            out.memo_state[t] = state
            began = np.where(new | back, t, began)
            known = np.where(new, t > 0, known | back)
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
