"""The event log of the invented Hollin Weir veg box: `python demo_data/generate.py` writes events-*.csv.gz.

`members.py` holds the true rates and draws each member's monthly states; here they become rows of a log,
such that the rules of veg_box.toml find the states again. Same seed, same bytes. The last part spoils a small
share of the rows in the ways in which real extracts are spoiled.
"""

from __future__ import annotations

import gzip
import hashlib
from dataclasses import fields
from pathlib import Path

import numpy as np
import pandas as pd

if __package__:
    from . import members as scheme
else:  # run as a script
    import members as scheme  # type: ignore[import-not-found,no-redef]

SEED = 20260930
BOX_PENCE = np.array([1150, 1500, 1950])  # small, medium, large
RISEN_BOX_PENCE, RISE_MONTH = np.array([1195, 1560, 2030]), 18  # from April 2025
TASTER_PENCE = 800  # the offer for new members
SKIPPED = 0.025  # single boxes that a member skips
PAUSED_BEFORE_LOG = 0.5  # of those paused in the first month: not in the log until they resume or leave
JOIN_AND_LEAVE = 0.01  # of the joiners, over and above: who join and cancel within one month

# Boxes come on the member's own weekday: every week, or in the first and third week of the month.
DELIVERED_WEEKS = np.zeros((8, 5), dtype=bool)
DELIVERED_WEEKS[scheme.WEEKLY] = True
DELIVERED_WEEKS[np.ix_([scheme.FORTNIGHTLY, scheme.TASTER_1, scheme.TASTER_2], [0, 2])] = True

BAD_DATE, BLANK_ID = 0.0007, 0.0006  # of the deliveries
DUPLICATE, UNKNOWN_EVENT, MISSPELT = 0.0018, 0.015, 0.08  # of all rows, of newsletters, of cancellations
AFTER_EXIT = 0.06  # of those who left: sent a box in the month after
AFTER_AS_OF = 0.06  # of the weekly members: a box booked ahead
BAD_DATES = ("2025-02-30 09:10", "2024-13-04 10:00", "0000-00-00 00:00", "tomorrow", "", "2026-06-31 12:20")
UNKNOWN_EVENTS = ("box_swapped", "recipe_viewed", "deliverd")
SPELLINGS = ("Cancel", "CANCELLED ")


def generate(
    members: int = 9000,
    months: int = scheme.MONTHS,
    *,
    seed: int = SEED,
    shocks: bool = True,
    differences: bool = True,
    seasons: bool = True,
    dirt: bool = True,
    growth: bool = True,
) -> pd.DataFrame:
    """The event log as text, one row an event, in the order of time."""
    people = scheme.draw_members(
        members, months, seed=seed, shocks=shocks, differences=differences, seasons=seasons, growth=growth
    )
    rng, dirt_rng = (np.random.default_rng([seed, stream]) for stream in (3, 4))
    calendar = Calendar(months)
    people, parts = _join_and_leave(people, calendar, rng)
    parts += _life_events(people, calendar, rng)
    if dirt:
        parts += _misplaced_boxes(people.walk, calendar, dirt_rng)
    log = pd.concat(parts, ignore_index=True).sort_values(["minute", "member", "what"], kind="stable")
    text = _as_text(log, people, rng)
    text.insert(0, "row_id", (np.arange(len(text)) + 100_001).astype(str))
    return _spoil(text, dirt_rng) if dirt else text


class Calendar:
    """Days of the months (one more than the window): first day, length, the days of each delivery weekday."""

    def __init__(self, months: int) -> None:
        first_days = (np.datetime64(scheme.FIRST_MONTH, "M") + np.arange(months + 2)).astype("datetime64[D]")
        starts = first_days.astype(int)
        self.start = starts[:-1]
        self.length = np.diff(starts)
        weekday = np.arange(1, 5)  # Tuesday to Friday; day 0 of numpy's calendar is a Thursday
        first = (weekday - (self.start[:, None] + 3)) % 7 + 1
        days = first[:, :, None] + 7 * np.arange(5)
        # (month, weekday, week); 0 where the month has no such day
        self.delivery_days = np.where(days <= self.length[:, None, None], days, 0)

    def rows(
        self,
        cells: tuple[np.ndarray, ...],
        day: np.ndarray,
        minute: int | np.ndarray,
        what: str | np.ndarray,
        pence: int | np.ndarray = -1,
    ) -> pd.DataFrame:
        """Rows of the log; cells = member, month (and what else was indexed); minute = minute of the day."""
        at = (self.start[cells[1]] + day - 1) * 1440 + minute
        return pd.DataFrame({"member": cells[0], "minute": at, "what": what, "pence": pence})


def _join_and_leave(
    people: scheme.Members, calendar: Calendar, rng: np.random.Generator
) -> tuple[scheme.Members, list[pd.DataFrame]]:
    """The members and some more, who join and cancel within one month: in no state at any month's end."""
    joined = people.joined[people.joined >= 0]
    k = round(JOIN_AND_LEAVE * len(joined))
    month = np.sort(rng.choice(joined, k))
    extra = scheme.Members(
        joined=month,
        steady=np.zeros(k, dtype=np.int8),
        channel=rng.integers(0, len(scheme.CHANNELS), k, dtype=np.int8),
        age=rng.integers(0, len(scheme.AGES), k, dtype=np.int8),
        arm=np.full(k, scheme.NOT_YET),
        walk=np.full((k, people.walk.shape[1]), scheme.NOT_YET, dtype=np.int8),
    )
    cells = (np.arange(k) + len(people.joined), month)
    rows = [
        calendar.rows(cells, rng.integers(first, first + 13, k), rng.integers(7 * 60, 23 * 60, k), what)
        for first, what in ((1, "joined"), (15, "cancelled"))
    ]
    both = {f.name: np.concatenate([getattr(people, f.name), getattr(extra, f.name)]) for f in fields(people)}
    return scheme.Members(**both), rows


def _life_events(people: scheme.Members, calendar: Calendar, rng: np.random.Generator) -> list[pd.DataFrame]:
    walk = people.walk
    before = np.column_stack([np.full(len(walk), scheme.NOT_YET), walk[:, :-1]])
    turn = _turns(walk, before)
    day = rng.integers(1, calendar.length[: walk.shape[1]] + 1, walk.shape)
    day = np.where(turn == "resumed", (day - 1) % 5 + 1, day)
    unseen = (walk[:, 0] == scheme.PAUSED) & (rng.random(len(walk)) < PAUSED_BEFORE_LOG)
    turn[unseen, 0] = "unseen"
    cells = np.nonzero((turn != "") & (turn != "unseen"))
    turns = calendar.rows(cells, day[cells], rng.integers(7 * 60, 23 * 60, len(cells[0])), turn[cells])
    boxes = _boxes(walk, before, turn, day, calendar, rng)
    declines = _declines(walk, boxes, calendar, rng)
    cells = np.nonzero((walk >= scheme.PAUSED) & (rng.random(walk.shape) < 0.10))
    letters = calendar.rows(
        cells, np.full(len(cells[0]), 3), rng.integers(6 * 60, 24 * 60, len(cells[0])), "newsletter_opened"
    )
    return [turns, boxes.drop(columns="month"), *declines, letters]


def _turns(walk: np.ndarray, before: np.ndarray) -> np.ndarray:
    """The one event, if any, that marks the move into each month; a card that lapses is dealt with apart."""
    new = walk == scheme.TASTER_1
    left_pause = (before == scheme.PAUSED) & (walk >= scheme.QUIET)
    return np.select(
        [
            new & (before == scheme.NOT_YET),
            new,
            (walk == scheme.PAUSED) & (before != scheme.PAUSED),
            left_pause,
            (walk == scheme.CANCELLED) & (before != scheme.CANCELLED),
        ],
        ["joined", "rejoined", "paused", "resumed", "cancelled"],
        default="",
    ).astype(object)


def _boxes(
    walk: np.ndarray,
    before: np.ndarray,
    turn: np.ndarray,
    day: np.ndarray,
    calendar: Calendar,
    rng: np.random.Generator,
) -> pd.DataFrame:
    """Delivered boxes: as before until the day of pausing or leaving; in a month of starting, after it."""
    n, months = walk.shape
    ends = (turn == "paused") | (turn == "cancelled")
    rhythm = np.where(ends, np.where(before == scheme.NOT_YET, scheme.WEEKLY, before), walk)
    opens = np.where(np.isin(turn, ["joined", "rejoined", "resumed"]), day, 0)
    closes = np.where(ends, day, 99)
    days = calendar.delivery_days[:months][:, rng.integers(0, 4, n)].swapaxes(0, 1)  # (member, month, week)
    due = DELIVERED_WEEKS[rhythm] & (walk != scheme.NOT_YET)[:, :, None] & (days > opens[:, :, None])
    cells = np.nonzero(due & (days < closes[:, :, None]) & (rng.random(days.shape) >= SKIPPED))
    size = rng.choice(3, n, p=[0.35, 0.45, 0.20])[cells[0]]
    extras = np.where(rng.random(len(size)) < 0.25, 50 * rng.integers(3, 17, len(size)), 0)  # eggs, bread
    pence = np.where(cells[1] < RISE_MONTH, BOX_PENCE[size], RISEN_BOX_PENCE[size]) + extras
    taster = np.isin(rhythm, [scheme.TASTER_1, scheme.TASTER_2])[cells[:2]]
    minute = 10 * rng.integers(8 * 6, 17 * 6, len(size))
    rows = calendar.rows(cells, days[cells], minute, "delivered", np.where(taster, TASTER_PENCE, pence))
    return rows.assign(month=cells[1])


def _declines(
    walk: np.ndarray, boxes: pd.DataFrame, calendar: Calendar, rng: np.random.Generator
) -> list[pd.DataFrame]:
    """Declined cards: before those that lapse, and others that were put right before the next box.

    A card may be declined in the first silent month already (never in a later one: two silent months after a
    declined card are a lapse by the rules, so it would come too early).
    """
    delivering = (walk >= scheme.TASTER_1) & (walk != scheme.QUIET)
    first_quiet = np.zeros(walk.shape, dtype=bool)
    first_quiet[:, 1:] = (walk[:, 1:] == scheme.QUIET) & delivering[:, :-1]
    lapses = np.zeros(walk.shape, dtype=bool)
    lapses[:, 1:] = (walk[:, 1:] == scheme.CARD_LAPSED) & (walk[:, :-1] == scheme.QUIET)
    u = rng.random(walk.shape)
    early = first_quiet[:, :-1] & lapses[:, 1:] & (u[:, 1:] < 0.6)
    put_right = first_quiet[:, :-1] & delivering[:, 1:] & (u[:, 1:] < 0.1)
    lapses[:, 1:] &= ~early
    lapses[:, :-1] |= early | put_right
    cells = np.nonzero(lapses)
    hour = rng.integers(5 * 60, 6 * 60, len(cells[0]))
    before_lapse = calendar.rows(cells, rng.integers(2, 28, len(cells[0])), hour, "card_declined")
    retried = boxes[rng.random(len(boxes)) < 0.003]
    morning = retried["minute"] // 1440 * 1440 + rng.integers(5 * 60, 6 * 60, len(retried))
    retried = retried.assign(minute=morning, what="card_declined", pence=-1).drop(columns="month")
    return [before_lapse, retried]


def _misplaced_boxes(walk: np.ndarray, calendar: Calendar, rng: np.random.Generator) -> list[pd.DataFrame]:
    """Boxes sent by mistake in the month after an exit, and boxes booked ahead, after the as-of date."""
    gone = (walk >= 0) & (walk <= scheme.CARD_LAPSED)
    just = np.zeros(walk.shape, dtype=bool)
    just[:, 2:] = gone[:, 2:] & gone[:, 1:-1] & ~gone[:, :-2]
    after_exit = np.nonzero(just & (rng.random(walk.shape) < AFTER_EXIT))
    ahead = np.flatnonzero((walk[:, -1] == scheme.WEEKLY) & (rng.random(len(walk)) < AFTER_AS_OF))
    after_as_of = (ahead, np.full(len(ahead), walk.shape[1]))
    return [
        calendar.rows(cells, rng.integers(1, 20, len(cells[0])), 600, "delivered", int(BOX_PENCE[1]))
        for cells in (after_exit, after_as_of)
    ]


def _as_text(log: pd.DataFrame, people: scheme.Members, rng: np.random.Generator) -> pd.DataFrame:
    """The log in the words of the extract; membership numbers run in the order of joining."""
    numbers = 104 + rng.integers(2, 5, len(people.joined)).cumsum()
    who = log["member"].to_numpy()
    stamp = np.datetime_as_string(log["minute"].to_numpy().astype("datetime64[m]"))
    return pd.DataFrame(
        {
            "member": np.char.zfill(numbers.astype(str), 5)[who],
            "at": pd.Series(stamp).str.replace("T", " "),
            "what": log["what"].to_numpy(),
            "pounds": [f"{pence // 100}.{pence % 100:02d}" if pence >= 0 else "" for pence in log["pence"]],
            "channel": np.array(list(scheme.CHANNELS))[people.channel[who]],
            "age_band": np.array(list(scheme.AGES))[people.age[who]],
            "trial": np.array([*scheme.ARMS, ""])[people.arm[who]],  # NOT_YET (-1): the last, empty
        }
    )


def _spoil(text: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """Bad dates, blank ids, unknown and misspelt events, and rows sent twice."""
    frame = {name: column.to_numpy(dtype=object, copy=True) for name, column in text.items()}

    def pick(what: str, share: float) -> np.ndarray:
        rows = np.flatnonzero(frame["what"] == what)
        return rng.choice(rows, round(share * len(rows)), replace=False)

    def cycle(values: tuple[str, ...], rows: np.ndarray) -> np.ndarray:
        return np.resize(np.array(values, dtype=object), len(rows))

    bad, blank = pick("delivered", BAD_DATE), pick("delivered", BLANK_ID)
    frame["at"][bad] = cycle(BAD_DATES, bad)
    frame["member"][blank] = cycle(("", " "), blank)
    unknown, misspelt = pick("newsletter_opened", UNKNOWN_EVENT), pick("cancelled", MISSPELT)
    frame["what"][unknown] = cycle(UNKNOWN_EVENTS, unknown)
    frame["what"][misspelt] = cycle(SPELLINGS, misspelt)
    twice = rng.choice(len(text), round(DUPLICATE * len(text)), replace=False)
    rows = np.concatenate([np.arange(len(text)), twice])
    sent = np.concatenate([np.arange(len(text)), twice + 40.5])  # again a little later
    return pd.DataFrame(frame).iloc[rows[np.argsort(sent, kind="stable")]].reset_index(drop=True)


def write(folder: Path, log: pd.DataFrame) -> list[Path]:
    """One gzip file a year, without the time of writing in it, and their SHA-256 in events.sha256."""
    year = pd.to_datetime(log["at"], errors="coerce", format="%Y-%m-%d %H:%M").dt.year.ffill().astype(int)
    written = []
    for name, rows in log.groupby(year, sort=True):
        path = folder / f"events-{name}.csv.gz"
        text = rows.to_csv(index=False, lineterminator="\n")
        with path.open("wb") as raw, gzip.GzipFile("", "wb", compresslevel=9, fileobj=raw, mtime=0) as packed:
            packed.write(text.encode())
        written.append(path)
    sums = [f"{hashlib.sha256(path.read_bytes()).hexdigest()}  {path.name}\n" for path in written]
    (folder / "events.sha256").write_text("".join(sums))
    return written


if __name__ == "__main__":
    for file in write(Path(__file__).parent, generate()):
        print(f"{file.name}  {file.stat().st_size:,} bytes")
