"""Random small studies and logs for the property tests: every kind of condition, ties, returns, dirt."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from datetime import date, datetime, timedelta
from pathlib import Path
from random import Random
from typing import Any

from hypothesis import strategies as st

from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.study import Condition, EventSpec, InputSpec, StateRule, Study

EVENTS = ("join", "buy", "stop", "pause")
KINDS = (
    "last_event",
    "silent_for",
    "at_least",
    "at_most",
    "spent_at_least",
    "tenure_below",
    "expired_for",
    "due_within",
)
FIRST_DAY = date(2024, 1, 1)
SPAN = {"day": 18, "week": 120, "month": 500, "quarter": 1500, "own": 450}


def four_four_five(quarters: int = 7) -> tuple[tuple[str, date, date], ...]:
    """A calendar of 4, 4 and 5 weeks from late 2023 on; paid-up-to days may lie beyond it."""
    rows, day = [], date(2023, 11, 27)
    for place in range(3 * quarters):
        end = day + timedelta(weeks=5 if place % 3 == 2 else 4, days=-1)
        rows.append((f"P{place}", day, end))
        day = end + timedelta(days=1)
    return tuple(rows)


CALENDARS = (
    Calendar("month"),
    Calendar("month"),
    Calendar("week"),
    Calendar("week", week_starts="thursday"),
    Calendar("quarter", fiscal_year_start=2),
    Calendar("day"),
    Calendar("own", own=four_four_five()),
)
FILLER = "zoe"  # buys steadily, so that a few faulty rows stay a small share of the extract


def some_events() -> st.SearchStrategy[tuple[str, ...]]:
    return st.lists(st.sampled_from(EVENTS), min_size=1, max_size=3, unique=True).map(tuple)


@st.composite
def conditions(draw: Any, role: str) -> Condition:
    kinds = [k for k in KINDS if not (role == "exit" and k == "tenure_below")]
    kind = draw(st.sampled_from(kinds))
    k = draw(st.integers(1, 3))
    if kind == "last_event":
        among = draw(some_events())
        return Condition(kind, (draw(st.sampled_from(among)),), among)
    if kind in ("silent_for", "at_least", "at_most"):
        least = 1 if kind == "at_least" else 0
        n = draw(st.integers(least, 3)) if kind != "silent_for" else 0
        return Condition(kind, draw(some_events()), k=k, n=n)
    if kind == "spent_at_least":
        return Condition(kind, k=k, amount=draw(st.sampled_from([0.1, 5.0, 12.5])))
    if kind == "expired_for":
        return Condition(kind, k=draw(st.integers(0, 2)))
    return Condition(kind, k=k)


@st.composite
def rule_files(draw: Any) -> tuple[StateRule, ...]:
    """One to five states with conditions, the last state takes everybody else."""
    rules = []
    for place in range(draw(st.integers(1, 5))):
        roles = ["exit"] * 4 + ["live"] if place == 0 else ["exit", "away", "entry", "live", "live"]
        role = draw(st.sampled_from(roles))
        alternative = st.lists(conditions(role), min_size=1, max_size=2).map(tuple)
        when = draw(st.lists(alternative, min_size=1, max_size=2).map(tuple))
        rules.append(StateRule(f"s{place}", role, when))
    return (*rules, StateRule("rest"))


def as_states(rules: Sequence[StateRule], impossible: Sequence[tuple[str, str]] = ()) -> States:
    def named(role: str) -> list[str]:
        return [r.name for r in rules if r.role == role]

    return States(
        [r.name for r in rules],
        exits=named("exit"),
        entries=named("entry"),
        away=named("away"),
        impossible=impossible,
    )


@st.composite
def studies(draw: Any) -> Study:
    calendar = draw(st.sampled_from(CALENDARS))
    kind = calendar.kind
    rules = draw(rule_files())
    optional = st.booleans()
    last = FIRST_DAY + timedelta(days=draw(st.integers(SPAN[kind] * 3 // 4, SPAN[kind])))
    begin = draw(st.none() | st.integers(0, SPAN[kind] // 6).map(lambda n: FIRST_DAY + timedelta(days=n)))
    spec = InputSpec(
        files=("log.csv",),
        customer="who",
        time="at",
        event="what",
        event_id="row" if draw(optional) else None,
        loaded_at="loaded" if draw(optional) else None,
        amount="money",
        valid_until="until",
        segments=("shop",) if draw(optional) else (),
        log_start=begin,
        joins=("join",) if draw(optional) else (),
        returns=draw(st.none() | some_events()),
        tie_order=draw(st.just(()) | st.permutations(EVENTS).map(tuple)),
    )
    others = draw(st.sampled_from(["reject", "ignore"]))
    names = [r.name for r in rules]
    no_exit = [r.name for r in rules if r.role != "exit"]
    pair = st.tuples(st.sampled_from(no_exit), st.sampled_from(names))
    impossible = draw(st.just([]) | st.lists(pair, max_size=2))
    return Study(
        as_states(rules, impossible),
        calendar,
        as_of=last,
        rules=rules,
        input=spec,
        events=EventSpec({"buy": ("buy", "BUY ")}, ("news",), others),
    )


@st.composite
def logs(draw: Any, study: Study) -> list[dict[str, str]]:
    """Rows of text in file order. Days beyond `as_of` and before the log's start are among them.

    How many customers and rows is hypothesis' choice (so that failures shrink); what they hold comes from a
    seed."""
    sizes = draw(st.lists(st.integers(1, 12), min_size=1, max_size=12))
    rng = Random(draw(st.integers(0, 2**32 - 1)))
    clock = rng.random() < 0.5
    rows = [
        row for place, size in enumerate(sizes) for row in _customer(study, f"c{place}", size, clock, rng)
    ]
    span = SPAN[study.calendar.kind]
    for n in range(40):
        rows.append(_row(study, FILLER, n * span // 40, "buy" if n else "join", clock, Random(n)))
    if rng.random() < 0.3:
        fault, bad = rng.choice([("who", ""), ("who", "Test"), ("who", "0"), ("at", "soon"), ("at", "")])
        rows.insert(rng.randrange(len(rows)), {**rows[0], fault: bad})
    for _ in range(rng.choice([0, 0, 1, 2])):
        rows.append(dict(rng.choice(rows)))  # identical in every column
    if rng.random() < 0.5:
        rng.shuffle(rows)
    return rows


def _customer(study: Study, who: str, size: int, clock: bool, rng: Random) -> list[dict[str, str]]:
    """Bursts of rows: days near one another, so that windows fill, empty and fill again."""
    span, rows = SPAN[study.calendar.kind], []
    day = rng.randrange(span // 2)
    for place in range(size):
        rare = rng.random() < 0.08
        what = rng.choice(["BUY ", "news", "zap"]) if rare else rng.choice(EVENTS)
        if place == 0 and rng.random() < 0.5:
            what = "join"
        rows.append(_row(study, who, day, what, clock, rng))
        day += rng.choice([0, 0, span // 40, span // 12, span // 8])
    return rows


def _row(study: Study, who: str, day: int, what: str, clock: bool, rng: Random) -> dict[str, str]:
    span = SPAN[study.calendar.kind]
    at = datetime(FIRST_DAY.year, FIRST_DAY.month, FIRST_DAY.day) + timedelta(days=day)
    text = at.date().isoformat()
    if clock:
        text = (at + timedelta(hours=rng.choice([0, 9, 9, 23]))).isoformat(sep=" ")
    until = FIRST_DAY + timedelta(days=max(0, day + rng.randrange(-span // 8, span // 3)))
    row = {
        "who": who,
        "at": text,
        "what": what,
        "money": rng.choice(["", "0.05", "5.00", "-3.20", "12.50"]),
        "shop": rng.choice(["east", "west"]),
        "until": rng.choice(["", until.isoformat()]),
    }
    if study.input.event_id:
        row["row"] = f"{who}{day}{what}{rng.randrange(100)}" if rng.random() < 0.9 else ""
    row["loaded"] = f"2026-01-0{rng.randrange(1, 4)}"
    return row


def write(rows: Sequence[dict[str, str]], path: Path) -> None:
    with open(path, "w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, fieldnames=list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)


# ---------------------------------------------------------------- histories of states
STATE_NAMES = ("a", "b", "c", "x", "y")
LAST_STEP = 14


@st.composite
def histories(draw: Any) -> tuple[Study, list[dict[str, str]]]:
    """A study of layout "history" and its rows: steps or months, gaps, absences, exits and returns."""
    steps = draw(st.booleans())
    optional = st.booleans()
    spec = InputSpec(
        layout="history",
        files=("log.csv",),
        customer="who",
        time="period",
        state="state",
        amount="money" if draw(optional) else None,
        segments=("shop",) if draw(optional) else (),
        on_gap=draw(st.sampled_from(["break", "carry", "c", "x"])),
        on_absent=draw(st.none() | st.sampled_from(["x", "y"])),
    )
    impossible = draw(st.just([]) | st.just([("b", "x"), ("a", "c")]))
    states = States(STATE_NAMES, exits=["x", "y"], entries=["a"], away=["c"], impossible=impossible)
    rules = tuple(StateRule(name, states.role(name)) for name in STATE_NAMES)
    calendar = Calendar("step" if steps else "month")
    as_of = None if steps else FIRST_DAY + timedelta(days=draw(st.integers(280, 400)))
    study = Study(states, calendar, as_of=as_of, rules=rules, input=spec)
    sizes = draw(st.lists(st.integers(1, LAST_STEP), min_size=1, max_size=12))
    rng = Random(draw(st.integers(0, 2**32 - 1)))
    rows = [row for place, size in enumerate(sizes) for row in _states_of(study, f"c{place}", size, rng)]
    rows += [_look(study, FILLER, t, "a", rng) for t in range(LAST_STEP) if t % 5 != 4 or rng.random() < 0.5]
    if rng.random() < 0.3:
        fault, bad = rng.choice([("who", ""), ("who", "unknown"), ("period", "soon")])
        rows.insert(rng.randrange(len(rows)), {**rows[0], fault: bad})
    for _ in range(rng.choice([0, 0, 1, 2])):
        again = dict(rng.choice(rows))  # the same look twice, or another state for the same period
        rows.insert(rng.randrange(len(rows)), {**again, "state": rng.choice([again["state"], *"abx"])})
    if rng.random() < 0.5:
        rng.shuffle(rows)
    return study, rows


def _states_of(study: Study, who: str, size: int, rng: Random) -> list[dict[str, str]]:
    """`size` looks at a customer, most of them at consecutive periods; states tend to stay."""
    t, state, rows = rng.randrange(LAST_STEP // 2) * rng.choice([0, 1]), rng.choice("abcx"), []
    for _ in range(size):
        if t >= LAST_STEP:
            break
        rows.append(_look(study, who, t, state, rng))
        state = state if rng.random() < 0.5 else rng.choice("aabbcxy")
        t += rng.choice([1, 1, 1, 1, 2, 4])
    return rows


def _look(study: Study, who: str, t: int, state: str, rng: Random) -> dict[str, str]:
    label = str(t) if study.calendar.kind == "step" else f"{2024 + t // 12}-{t % 12 + 1:02d}"
    return {
        "who": who,
        "period": label,
        "state": state,
        "money": rng.choice(["", "0.05", "5.00", "-3.20"]),
        "shop": rng.choice(["east", "west"]),
    }
