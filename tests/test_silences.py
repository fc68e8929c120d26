"""Silences counted by the engine against a slow count by hand rules, and the windows they lead to."""

from collections import Counter

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import cohortflow as cf
from cohortflow.assessment.windows import later_returning, silence_windows
from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.interval import wilson
from cohortflow.runs.trust import windows_study
from cohortflow.study import Condition, InputSpec, StateRule, Study
from cohortflow.tally import SILENCE_ENDS

PERIODS = 9
EVENTS = ("joined", "bought", "declined", "cancelled", "rejoined")
SILENT = {"silent_for": 2, "of": ["bought"]}
AMONG = ["joined", "cancelled", "rejoined"]
PLAIN = [
    {"name": "cancelled", "role": "exit", "when": {"last_event": ["cancelled"], "among": AMONG}},
    {"name": "gone", "role": "exit", "when": SILENT},
    {"name": "here"},
]  # fmt: skip
DECLINED = {"last_event": ["declined"], "among": ["declined", "bought", "rejoined"]}
COMPOUND = [PLAIN[0], {"name": "gone", "role": "exit", "when": {"all": [DECLINED, SILENT]}}, PLAIN[2]]


def frame(log: list[tuple[int, int, str]]) -> pd.DataFrame:
    """(customer, period, event): the n-th event of a period on its n-th day."""
    seen: Counter[tuple[int, int]] = Counter()
    rows = []
    for who, t, what in log:
        seen[who, t] += 1
        rows.append((f"c{who}", f"2026-{t + 1:02d}-{seen[who, t]:02d}", what))
    return pd.DataFrame(rows, columns=["customer", "time", "event"])


def tally_of(log, rules, **more):
    more = {
        "joins": ["joined"],
        "returns": ["rejoined"],
        "log_start": "2026-01-01",
        "as_of": "2026-09-30",
        **more,
    }
    others = {"ignore": [e for e in EVENTS if e not in str(rules) and e not in ("joined", "rejoined")]}
    return cf.count(cf.read_events(frame(log), rules, events=others, **more))


def slow(log: list[tuple[int, int, str]], *, compound: bool) -> Counter:
    """One customer at a time, one period at a time: (entered, length, ended) -> silences."""
    out: Counter = Counter()
    for who in sorted({w for w, _, _ in log}):
        mine = [(t, e) for w, t, e in log if w == who and (compound or e != "declined")]
        if mine:
            out += _of_one(mine, compound)
    return out


def _of_one(mine: list[tuple[int, str]], compound: bool) -> Counter:
    out: Counter = Counter()
    began, last_buy, entered = mine[0][0], None, 0  # last_buy: also of boxes set aside after an exit
    kept_buy, exit_, cancel, decline = None, None, None, None  # what the rules see
    for t in range(began, PERIODS):
        events = [e for p, e in mine if p == t]
        bought = "bought" in events
        if bought:
            out[entered, t - 1 - last_buy if entered else 0, "event"] += bool(entered)
            entered, last_buy = 0, t
        if exit_ and "rejoined" in events:
            events, exit_, cancel, decline, began = events[events.index("rejoined") :], None, None, None, t
        elif exit_:
            events = []
        for e in events:
            cancel = e if e in ("joined", "cancelled", "rejoined") else cancel
            decline = e if e in ("declined", "bought", "rejoined") else decline
            kept_buy = t if e == "bought" else kept_buy
        beside = decline == "declined" or not compound
        silent = kept_buy <= t - 2 if kept_buy is not None else began <= t - 2
        if not exit_:
            exit_ = "cancelled" if cancel == "cancelled" else "gone" if beside and silent else None
        fits = beside and exit_ != "cancelled"
        if entered and not fits:
            out[entered, t - 1 - last_buy, "otherwise"] += 1
            entered = 0
        elif fits and not entered and last_buy is not None and not bought:
            entered = t - last_buy
    if entered:
        out[entered, PERIODS - 1 - last_buy, "as_of"] += 1
    return +out


def counted(tally) -> Counter:
    t = tally.table("silences")
    assert (t["state"] == tally.states.index("gone")).all()
    keys = zip(t["entered"], t["length"], [SILENCE_ENDS[e] for e in t["ended"]], strict=True)
    return Counter(dict(zip(keys, t["n"], strict=True)))


LOGS = st.lists(
    st.tuples(st.integers(0, 5), st.integers(0, PERIODS - 1), st.sampled_from(EVENTS)),
    min_size=1,
    max_size=40,
).map(lambda rows: sorted(rows, key=lambda r: r[1]))
FIXED = [
    (9, 0, "joined"),
    (9, 1, "cancelled"),
    (8, 0, "bought"),
    (8, 1, "declined"),
]  # both exits are reached


@settings(max_examples=60, deadline=None)
@given(LOGS, st.booleans())
def test_the_engine_counts_what_a_slow_count_by_words_counts(log, compound):
    log = sorted([*log, *FIXED], key=lambda r: r[1])
    assert counted(tally_of(log, COMPOUND if compound else PLAIN)) == slow(log, compound=compound)


def test_by_hand():
    """a buys in January and March: one silent month, ended by an event, then silent April to September (6).
    b buys in January, cancels in March: silent February (1), then over otherwise.
    c buys every month: no silence. d only joined: no `of` event, no silence.
    e is gone after March, gets a box in June that is set aside (only `rejoined` ends an exit): ended by an event, 4
    silent months; then July to September (3)."""
    log = [
        ("a", 0, "bought"),
        ("a", 2, "bought"),
        ("b", 0, "bought"),
        ("b", 2, "cancelled"),
        ("d", 0, "joined"),
    ]
    log += [("c", t, "bought") for t in range(PERIODS)] + [("e", 0, "bought"), ("e", 5, "bought")]
    tally = tally_of(log, PLAIN)
    assert counted(tally) == Counter(
        {
            (1, 1, "event"): 1,
            (1, 6, "as_of"): 1,
            (1, 1, "otherwise"): 1,
            (1, 4, "event"): 1,
            (1, 3, "as_of"): 1,
        }
    )
    found = silence_windows(tally, {"gone": 4}).to_frame()
    # at 1: 5 at risk, 1 event, 1 otherwise; at 2: 3 at risk; at 3: an open one is not at risk, 2 are left (a, e);
    # at 4: 2 at risk, 1 event. F(1) = 1/5 + 3/5 * 1/2; F(2) = F(3) = F(4) = 1/2
    assert found["share_later_returning"].tolist() == pytest.approx([0.5, 0.5, 0.5, 0.5])
    assert found["reporting_delay"].tolist() == [1, 2, 3, 4] and (found["exit"] == "gone").all()


def test_a_rule_beside_silence_lets_only_those_in_for_whom_it_holds():
    """a: bought in January, declined in March: enters at length 2, open at 8. b is silent, never declined."""
    log = [("a", 0, "bought"), ("a", 2, "declined"), ("b", 0, "bought"), ("b", 8, "cancelled")]
    assert counted(tally_of(log, COMPOUND)) == Counter({(2, 8, "as_of"): 1})


def test_without_other_endings_it_is_kaplan_meier_with_log_log_limits():
    """1 - S of statsmodels' product-limit estimate, Greenwood's error, and limits of log(-log S) by the formula."""
    from statsmodels.duration.survfunc import SurvfuncRight

    rng = np.random.default_rng(3)
    length, event = rng.integers(1, 12, 300), rng.integers(0, 3, 300) // 2
    length[:2], event[:2] = 15, 0  # so that not all end
    spells = pd.DataFrame({"length": length, "ended": event, "n": 1})
    share, low, high = later_returning(spells, 1, 0.9)
    # an open silence of l periods was not yet at risk of ending after l: censored just before it
    known = SurvfuncRight(length - 0.5 * (event == 0), event)
    s, se = known.surv_prob[-1], known.surv_prob_se[-1]
    assert share == pytest.approx(1 - s)
    half = 1.6448536269514722 * se / (s * abs(np.log(s)))
    assert low == pytest.approx(1 - s ** np.exp(-half)) and high == pytest.approx(1 - s ** np.exp(half))


def test_the_variance_with_two_endings_is_that_of_a_multinomial_when_nothing_is_censored():
    """Everybody ends: F = x/n, and the recursion must give x (n - x) / n^3 (binomial)."""
    spells = pd.DataFrame({"length": [1, 1, 2, 3, 3], "ended": [1, 2, 1, 2, 1], "n": [10, 20, 5, 30, 15]})
    share, low, high = later_returning(spells, 1, 0.9)
    assert share == pytest.approx(30 / 80)
    half = 1.6448536269514722 * np.sqrt(30 * 50 / 80**3) / (50 / 80 * -np.log(50 / 80))
    assert [low, high] == pytest.approx([1 - (50 / 80) ** np.exp(-half), 1 - (50 / 80) ** np.exp(half)])


def test_where_nobody_or_everybody_returned_the_limits_are_wilsons():
    none = pd.DataFrame({"length": [1, 2], "ended": [2, 2], "n": [4, 6]})
    assert later_returning(none, 1, 0.9) == (0.0, *map(float, wilson(0, 10, level=0.9)))
    every = pd.DataFrame({"length": [1], "ended": [1], "n": [7]})
    assert later_returning(every, 1, 0.9) == (1.0, *map(float, wilson(7, 7, level=0.9)))
    assert np.isnan(later_returning(none.iloc[:0], 3, 0.9)).all()


def test_what_is_not_told_is_refused():
    log = [("a", 0, "bought"), ("a", 3, "cancelled")]
    only = tally_of(log, [PLAIN[0], PLAIN[2]])
    with pytest.raises(NotIdentified, match='do not hold the table "silences"'):
        silence_windows(only, {"cancelled": 2})
    tally = tally_of(log, PLAIN)
    with pytest.raises(NotIdentified, match='do not hold the table "silences"'):
        tally.at_origin("2026-05").table("silences")  # no dates: it cannot be cut back
    with pytest.raises(CallError, match='got "here": 2'):
        silence_windows(tally, {"here": 2})
    with pytest.raises(NotIdentified, match="No exit of the study asks for silence"):
        silence_windows(tally, {})


def test_a_study_shows_windows_up_to_twice_its_own():
    tally = tally_of(
        [("a", 0, "bought"), ("b", 0, "bought"), ("b", 4, "bought"), ("b", 5, "cancelled")], PLAIN
    )
    gone = StateRule("gone", "exit", ((Condition("silent_for", ("bought",), k=2),),))
    study = Study(tally.states, rules=(gone, StateRule("here")), input=InputSpec(), level=0.8)
    found = windows_study(study, tally)
    assert found.to_frame()["window"].tolist() == [1, 2, 3, 4] and found.level == 0.8
    assert "1 exits by silence" in repr(found)
    with pytest.raises(NotIdentified, match="silent_for"):
        windows_study(Study(tally.states, rules=(StateRule("here"),)), tally)
