"""The study file: what it becomes, and every refusal with its text."""

import datetime
import shutil
from pathlib import Path

import pytest

from cohortflow.errors import CallError, CohortflowError, InputError, StudyError
from cohortflow.states import States
from cohortflow.study import (
    ChangeSpec,
    Condition,
    PlannedJoiners,
    StateRule,
    Study,
    apply_overrides,
    default_study,
    read_study,
)
from cohortflow.study.data_file import is_data_file
from cohortflow.study.rules import implies

EVENTS = """\
[study]
period = "month"
as_of = "2026-09-30"

[input]
layout = "events"
files = ["log.csv"]
customer = "who"
time = "at"
event = "what"
joins = ["joined"]
amount = "paid"

[[state]]
name = "gone"
role = "exit"
when = { last_event = ["stopped"], among = ["joined", "stopped"] }

[[state]]
name = "silent"
role = "exit"
when = { silent_for = 3, of = ["bought"] }

[[state]]
name = "new"
role = "entry"
when = { tenure_below = 1 }

[[state]]
name = "usual"
"""
HISTORY = """\
[study]
period = "month"
as_of = "2026-09-30"

[input]
layout = "history"
files = ["panel.csv"]
customer = "who"
time = "month"
state = "state"

[[state]]
name = "in"

[[state]]
name = "out"
role = "exit"
"""
VALUE = '[value]\ncurrency = "GBP"\n'
SCENARIO = '[[scenario]]\nname = "push"\n'


def written(folder: Path, text: str, name: str = "shop.toml") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def refused(folder: Path, text: str) -> str:
    with pytest.raises(StudyError) as caught:
        read_study(written(folder, text))
    return str(caught.value)


# ---- what it becomes ----
def test_rules_are_flattened_into_alternatives_of_conditions(tmp_path):
    text = EVENTS.replace(
        '{ silent_for = 3, of = ["bought"] }',
        '[ { all = [ { silent_for = 3, of = ["bought"] }, { all = [ { expired_for = 0 } ] } ] }, '
        '{ at_most = 0, of = ["bought"], within = 4, spent_at_least = 2 } ]',
    )
    rule = read_study(written(tmp_path, text)).rules[1]
    assert rule == StateRule(
        "silent",
        "exit",
        (
            (Condition("silent_for", ("bought",), k=3), Condition("expired_for")),
            (Condition("at_most", ("bought",), k=4), Condition("spent_at_least", k=4, amount=2.0)),
        ),
    )


def test_of_and_among_default_to_every_event_that_a_rule_names(tmp_path):
    text = EVENTS.replace('{ silent_for = 3, of = ["bought"] }', "{ silent_for = 3 }").replace(
        ', among = ["joined", "stopped"]', ""
    )
    gone, silent = read_study(written(tmp_path, text)).rules[:2]
    assert gone.when[0][0].among == ("stopped",) and silent.when[0][0].events == ("stopped",)


def test_states_roles_and_returns(tmp_path):
    study = read_study(written(tmp_path, EVENTS))
    assert study.states == States(
        ["gone", "silent", "new", "usual"], exits=["gone", "silent"], entries=["new"]
    )
    assert study.returns_of("gone") == ("joined",)
    assert study.returns_of("silent") == ("joined", "bought")  # its own `of` events end an exit by silence
    given = read_study(written(tmp_path, EVENTS.replace('joins = ["joined"]', 'returns = ["back"]')))
    assert given.returns_of("gone") == given.returns_of("silent") == ("back",)
    with pytest.raises(CallError, match='"usual" is not an exit'):
        study.returns_of("usual")


def test_warm_up_is_the_largest_window_and_double_without_joins(tmp_path):
    assert read_study(written(tmp_path, EVENTS)).warm_up == 3
    assert read_study(written(tmp_path, EVENTS.replace('joins = ["joined"]\n', ""))).warm_up == 6
    assert read_study(written(tmp_path, HISTORY)).warm_up == 0


@pytest.mark.parametrize(
    ("as_of", "last"), [("2026-09-30", "2026-09"), ("2026-09-29", "2026-08"), ("2026-10-01", "2026-09")]
)
def test_the_last_complete_period_ends_by_the_as_of_day(tmp_path, as_of, last):
    study = read_study(written(tmp_path, EVENTS.replace("2026-09-30", as_of)))
    assert study.calendar.label(study.last_complete) == last


def test_events_at_one_instant_follow_tie_order_then_the_rules(tmp_path):
    text = EVENTS.replace('joins = ["joined"]', 'joins = ["joined"]\ntie_order = ["stopped", "joined"]')
    assert read_study(written(tmp_path, text)).event_order == ("stopped", "joined", "bought")
    assert read_study(written(tmp_path, EVENTS)).event_order == ("stopped", "joined", "bought")


def test_every_part_of_the_forecast_is_read(tmp_path):
    (tmp_path / "plan.csv").write_text("period,kind,state,customers\n2026-10,joined,new,30\n")
    (tmp_path / "budget.csv").write_text("period,total,amount\n2026-12,all_live,900\n2026-12,buyers,800\n")
    text = EVENTS + (
        '[moves]\nimpossible = [["usual", "new"]]\n[totals]\nbuyers = ["new", "usual"]\n'
        '[model]\nname = "recent"\nhalf_life = 6\nbands = [1, 3]\ntypes = 2\nexclude = ["2026-01"]\n'
        '[joiners]\nmethod = "planned"\nfile = "plan.csv"\n'
        + VALUE
        + "per_period = { usual = 3 }\n"
        + 'on_move = [ { from = "new", to = "usual", amount = -1 } ]\n'
        + SCENARIO
        + 'starts = "2026-11"\nends = "2026-12"\n'
        + 'change = [ { from = "all_live", to = "gone", multiply = 0.5 }, '
        '{ from = "usual", to = "gone", set = 0.1, balance = ["usual"] } ]\n'
        '[[adjustment]]\nperiod = "2026-12"\nstate = "usual"\ncustomers = -5\nreason = "works"\n'
        '[budget]\nfile = "budget.csv"\n[people]\nprepared_by = ""\n'
    )
    study = read_study(written(tmp_path, text))
    october = study.calendar.parse("2026-10")
    assert not study.states.allowed[3, 2]
    assert study.model.exclude == (october - 9,) and study.model.bands == (1, 3)
    assert study.joiners.rows == (PlannedJoiners(october, "joined", "new", 30.0),)
    assert dict(study.value.per_period) == {"usual": 3.0} and study.value.timing == "middle"
    assert study.scenarios[0].change == (
        ChangeSpec("all_live", "gone", "multiply", 0.5),
        ChangeSpec("usual", "gone", "set", 0.1, ("usual",)),
    )
    assert (study.scenarios[0].starts, study.scenarios[0].ends) == (october + 1, october + 2)
    assert study.adjustments[0].customers == -5.0 and [row.total for row in study.budget] == [
        "all_live",
        "buyers",
    ]


def test_an_own_calendar_and_plain_steps(tmp_path):
    (tmp_path / "own.csv").write_text("label,start,end\nP1,2026-01-01,2026-01-28\nP2,2026-01-29,2026-03-04\n")
    text = HISTORY.replace("2026-09-30", "2026-01-28").replace(
        "[input]", 'calendar = "own.csv"\nhorizon = 1\n[input]'
    )
    study = read_study(written(tmp_path, text))
    assert study.calendar.kind == "own" and study.last_complete == 0
    steps = HISTORY.replace('as_of = "2026-09-30"\n', "").replace('period = "month"', 'period = "step"')
    study = read_study(written(tmp_path, steps))
    assert study.as_of is None and study.last_complete is None


def test_overrides_are_read_as_toml_and_their_origin_is_kept(tmp_path):
    path = written(tmp_path, EVENTS)
    overrides = {"study.level": "0.8", "study.as_of": "2026-08-31", "state.silent.when": "{ silent_for = 2 }"}
    study = read_study(path, overrides=overrides, set_by={"study.level": "environment"})
    assert (study.level, study.as_of) == (0.8, datetime.date(2026, 8, 31))
    assert study.rules[1].conditions[0].k == 2
    origins = {key: study.origin_of[f"study.{key}"] for key in ("level", "as_of", "period", "seed")}
    assert origins == {"level": "environment", "as_of": "option", "period": "study file", "seed": "default"}


def test_the_digest_changes_with_what_a_count_means_and_with_nothing_else(tmp_path):
    base = read_study(written(tmp_path, EVENTS)).digest()

    def after(old: str, new: str) -> str:
        return read_study(written(tmp_path, EVENTS.replace(old, new))).digest()

    assert after("2026-09-30", "2026-12-31") == base and after("log.csv", "other.csv") == base
    same = read_study(
        written(tmp_path, EVENTS), overrides={"study.horizon": 3, "study.level": 0.5, "study.seed": 9}
    )
    assert same.digest() == base
    meaning = [
        ("silent_for = 3", "silent_for = 2"),
        ('role = "entry"', 'role = "live"'),
        ('joins = ["joined"]', 'joins = ["joined"]\nreturns = ["joined"]'),
        ('period = "month"', 'period = "week"'),
        ('"usual"', '"steady"'),
        (
            "[[state]]",
            '[events]\nmap = { stopped = ["Stop"] }\n[moves]\nimpossible = [["usual", "new"]]\n[[state]]',
        ),
    ]
    changed = {
        after(old, new) if i < 5 else after(f'{old}\nname = "gone"', f'{new}\nname = "gone"')
        for i, (old, new) in enumerate(meaning)
    }
    assert len(changed) == len(meaning) and base not in changed


def test_the_study_as_used_is_ready_for_json_and_has_no_path(tmp_path):
    shown = read_study(written(tmp_path, EVENTS)).to_dict()
    assert shown["level"] == 0.9 and shown["rules"][3] == {"name": "usual", "role": "live", "when": []}
    assert "path" not in shown and str(tmp_path) not in str(shown)


# ---- where a refusal points ----
def test_a_refusal_names_file_line_table_and_key(tmp_path):
    text = EVENTS.replace('role = "entry"', 'rolle = "entry"')
    assert refused(tmp_path, text) == (
        'shop.toml, line 26: [[state]] "new" rolle: unknown key (did you mean "role"?). '
        'Known keys: "name", "role", "when".'
    )
    with pytest.raises(
        StudyError, match=r"shop.toml, changed by option: \[study\] level: needs a number between 0"
    ):
        read_study(written(tmp_path, EVENTS), overrides={"study.level": 2})


IMPOSSIBLE = "[moves]\nimpossible = "
CHANGE = SCENARIO + "change = [ "
TOTALS = "[totals]\n"
EVENT_REFUSALS = [
    # (replace, by, text of the refusal); an empty `replace` appends
    ("", "[modle]\n", 'top level modle: unknown key (did you mean "model"?)'),
    ("[input]", "[inputs]", 'unknown key (did you mean "input"?)'),
    ('period = "month"', "", '[study] period: missing; it needs one of "day", "week"'),
    ('period = "month"', 'periods = "month"', 'unknown key (did you mean "period"?)'),
    ('period = "month"', 'period = "monthly"', 'unknown value "monthly" (did you mean "month"?)'),
    ('as_of = "2026-09-30"', "", '[study] as_of: missing; it needs a date like "2026-09-30"'),
    ("2026-09-30", "30.9.2026", '"30.9.2026" is not a date; write it as year-month-day'),
    ('as_of = "2026-09-30"', "as_of = 2026-09-30T12:00:00", "needs a date without a clock time"),
    (
        'as_of = "2026-09-30"',
        "as_of = 20260930",
        'needs a date like "2026-09-30", got a whole number (20260930)',
    ),
    ("[input]", "horizon = 0\n[input]", "horizon: needs a whole number of at least 1, got 0"),
    ("[input]", "horizon = 2.5\n[input]", "horizon: needs a whole number, got a number (2.5)"),
    ("[input]", "horizon = true\n[input]", "horizon: needs a whole number, got true or false (True)"),
    ("[input]", "level = 1.0\n[input]", "level: needs a number between 0 and 1, like 0.90; got 1"),
    ("[input]", "level = nan\n[input]", "level: needs a number that is finite, got nan"),
    ("[input]", 'level = "high"\n[input]', 'level: needs a number, got the text "high"'),
    ("[input]", "seed = -1\n[input]", "seed: needs a whole number of at least 0, got -1"),
    ("[input]", "fiscal_year_start = 13\n[input]", "fiscal_year_start: is a month from 1 to 12, got 13"),
    ("[input]", 'week_starts = "mon"\n[input]', 'week_starts: unknown value "mon"'),
    ("[input]", 'title = " "\n[input]', "title: is an empty text"),
    ("[input]", 'calendar = "none.csv"\n[input]', 'calendar: cannot read "none.csv": No such file'),
    ('layout = "events"', "", "[input] layout: missing"),
    ('files = ["log.csv"]', "", "[input] files: missing; it needs the files of the extract"),
    (
        'files = ["log.csv"]',
        'files = "log.csv"',
        'files: needs a list of texts, like ["a", "b"], got the text',
    ),
    ('files = ["log.csv"]', 'files = ["a", "a"]', 'files: has "a" more than once'),
    ('files = ["log.csv"]', "files = [1]", "files: needs non-empty texts, got a whole number (1)"),
    ('event = "what"', "", "[input] event: missing; it needs a text"),
    ('event = "what"', 'event = "at"', 'event: the column "at" is already used as time'),
    (
        'event = "what"',
        'event = "what"\nsegments = ["who"]',
        'segments: the column "who" is already used as cust',
    ),
    (
        'event = "what"',
        'event = "what"\nstate = "s"',
        'state: has no meaning in the layout "events"; it belongs to',
    ),
    ('event = "what"', 'event = "what"\nloaded_at = "l"', "loaded_at: does nothing without `event_id`"),
    ('amount = "paid"', 'currency = "c"', "currency: does nothing without `amount`"),
    ('event = "what"', 'event = "what"\ndate_format = "dmy"', 'date_format: "dmy" has no % codes'),
    ('event = "what"', 'event = "what"\ndelimiter = ";;"', "delimiter: needs one character"),
    ('event = "what"', 'event = "what"\ndecimal = ";"', 'decimal: unknown value ";"'),
    ('event = "what"', 'event = "what"\nencoding = "utf-88"', 'encoding: unknown encoding "utf-88"'),
    (
        'event = "what"',
        'event = "what"\ntimezone = "Europe/Londn"',
        '"Europe/Londn" (did you mean "Europe/London"?)',
    ),
    ('event = "what"', 'event = "what"\nlog_start = "soon"', 'log_start: "soon" is not a date'),
    (
        'event = "what"',
        'event = "what"\ntie_order = ["bougth"]',
        '"bougth" is named by none of rules, joins or ret',
    ),
    (
        "",
        '[events]\nmap = { stoped = ["x"] }\n',
        'map: "stoped" is named by none of rules, joins, returns or ignore',
    ),
    ("", '[events]\nmap = { stopped = ["x"], bought = ["x"] }\n', 'the spelling "x" already means "stopped"'),
    (
        "",
        '[events]\nmap = { stopped = ["bought"] }\n',
        'the spelling "bought" of "stopped" is itself a name used',
    ),
    ("", '[events]\nmap = { stopped = "x" }\n', "[events] map: stopped: needs a list of texts"),
    ("", '[events]\nignore = ["bought"]\n', 'ignore: "bought" is also used by a rule, joins or returns'),
    ("", '[events]\nothers = "drop"\n', 'others: unknown value "drop"'),
    ('name = "new"', 'name = "gone"', 'name: the state "gone" is there more than once'),
    ('name = "new"', 'name = "all_live"', '"all_live" is reserved for the sum of the live states'),
    ('name = "new"\n', "", "[[state]] number 3 name: missing"),
    ('role = "entry"', 'role = "entrance"', 'role: unknown value "entrance"'),
    ("when = { tenure_below = 1 }", "when = 3", "when: needs a table of conditions like { silent_for = 2 }"),
    ("when = { tenure_below = 1 }", "when = []", "when: is an empty list"),
    ("when = { tenure_below = 1 }", "when = {}", "no condition in it; it needs one of"),
    ("when = { tenure_below = 1 }", "when = [3]", 'joined by "or"; got a whole number (3)'),
    ("when = { tenure_below = 1 }", "when = { all = 3 }", "when: all: needs a list of tables"),
    (
        "when = { tenure_below = 1 }",
        "when = { all = [3] }",
        "when: all: needs a table { ... }, got a whole number",
    ),
    ("tenure_below", "tenure_under", 'when: tenure_under: unknown key (did you mean "tenure_below"?)'),
    ("tenure_below = 1", "tenure_below = 0", "tenure_below: needs a whole number of at least 1, got 0"),
    (
        "tenure_below = 1",
        'tenure_below = 1, of = ["x"]',
        "of: does nothing without silent_for or at_least or at_mo",
    ),
    (
        "tenure_below = 1",
        "tenure_below = 1, within = 2",
        "within: does nothing without at_least or at_most or spent",
    ),
    ("tenure_below = 1", 'tenure_below = 1, among = ["x"]', "among: does nothing without last_event"),
    ("tenure_below = 1", "at_least = 1", "when: within: missing; it needs a whole number"),
    ("tenure_below = 1", "at_least = 0, within = 1", "at_least: needs a whole number of at least 1, got 0"),
    ("tenure_below = 1", "silent_for = 1, of = []", "of: is an empty list"),
    ("tenure_below = 1", "last_event = []", "last_event: is an empty list"),
    (
        "tenure_below = 1",
        'last_event = ["bought"]',
        "last_event needs `among` (the events it is the latest of)",
    ),
    (
        'among = ["joined", "stopped"]',
        'among = ["joined"]',
        'among: leaves out "stopped", which last_event names',
    ),
    ('silent_for = 3, of = ["bought"]', "tenure_below = 2", "tenure_below cannot be used by an exit"),
    (
        'name = "silent"\nrole = "exit"\nwhen = { silent_for = 3, of = ["bought"] }',
        'name = "silent"',
        'no customer can reach this state: "silent" before it has no `when` and takes everybody',
    ),
    ("tenure_below = 1", 'silent_for = 4, of = ["bought"]', 'whoever fits it is taken before by "silent"'),
    ('name = "usual"', 'name = "usual"\nwhen = { due_within = 1 }', "every state has a `when`"),
    ("", IMPOSSIBLE + '[["usual", "nwe"]]\n', 'impossible: unknown state "nwe" (did you mean "new"?)'),
    ("", IMPOSSIBLE + '[["usual"]]\n', 'impossible: needs pairs ["from", "to"], got [\'usual\']'),
    ("", IMPOSSIBLE + '[["gone", "new"]]\n', 'impossible: "gone" is an exit'),
    (
        "",
        IMPOSSIBLE + '[["new","gone"],["new","silent"],["new","new"],["new","usual"]]\n',
        'no move from "new"',
    ),
    ("", TOTALS + 'all_live = ["new"]\n', "all_live: is reserved: the sum of the live states"),
    ("", TOTALS + 'new = ["usual"]\n', "new: is the name of a state"),
    ("", TOTALS + 'lost = ["gone"]\n', 'lost: unknown state (exits cannot be added) "gone"'),
    ("", '[model]\nname = "plane"\n', 'name: unknown value "plane" (did you mean "plain"?)'),
    ("", "[model]\nwindow = 0\n", "window: needs a whole number of at least 1, got 0"),
    ("", "[model]\nhalf_life = 0\n", "half_life: needs a number above 0, got 0"),
    ("", "[model]\nbands = [3, 1]\n", "bands: needs rising whole numbers from 1 on, got [3, 1]"),
    ("", "[model]\ntypes = 1\n", "types: needs a whole number of at least 2, got 1"),
    (
        "",
        '[model]\nexclude = ["2026-13"]\n',
        'exclude: "2026-13" is not a month label; one looks like "2026-09"',
    ),
    ("", '[joiners]\nmethod = "guess"\n', 'method: unknown value "guess"'),
    (
        "",
        '[joiners]\nmethod = "planned"\n',
        'file: missing; the method "planned" needs a file with the columns',
    ),
    ("", VALUE, "per_period: missing; it needs amounts by state"),
    (
        "",
        VALUE + "per_period = 3\n",
        'per_period: needs amounts by state, or "observed", got a whole number (3)',
    ),
    ("", VALUE + 'per_period = "seen"\n', 'needs amounts by state, or "observed"; got the text "seen"'),
    ("", VALUE + "per_period = { gone = 1 }\n", 'unknown state (exits have no value) "gone"'),
    ("", VALUE + 'per_period = "observed"\n', 'margin: missing; per_period = "observed" needs the share'),
    ("", VALUE + "per_period = { new = 1 }\nmargin = 0.2\n", "margin: does nothing unless per_period"),
    ("", VALUE + 'per_period = "observed"\nmargin = 35\n', "margin: needs a number from 0 to 1, got 35"),
    (
        "",
        VALUE + "per_period = {}\ndiscount_rate = -1\n",
        "discount_rate: needs a number of at least 0, got -1",
    ),
    ("", VALUE + 'per_period = {}\nfirst_period_discounted = "no"\n', "needs true or false, got the text"),
    (
        "",
        VALUE + 'per_period = {}\non_move = [ { from = "new", to = "x", amount = 1 } ]\n',
        'unknown state "x"',
    ),
    ("", SCENARIO + SCENARIO, "change: missing; a scenario needs change, per_period or joiners_multiply"),
    ("", (SCENARIO + "joiners_multiply = 2\n") * 2, 'scenario names must differ; "push" came more than once'),
    (
        "",
        SCENARIO + 'joiners_multiply = 2\nstarts = "2026-09"\n',
        "2026-09 is not ahead: the last complete period",
    ),
    (
        "",
        SCENARIO + 'joiners_multiply = 2\nstarts = "2026-12"\nends = "2026-11"\n',
        "ends: 2026-11 lies before",
    ),
    ("", SCENARIO + 'joiners_multiply = 2\nsegment = "web"\n', 'segment: "web" cannot be met'),
    ("", SCENARIO + 'joiners_multiply = 2\ncase = "middle"\n', 'case: unknown value "middle"'),
    ("", CHANGE + '{ from = "new", to = "usual" } ]\n', "takes exactly one of add, multiply, set; got 0"),
    (
        "",
        CHANGE + '{ from = "new", to = "usual", add = 0.1, set = 0.2 } ]\n',
        "exactly one of add, multiply, set; got 2",
    ),
    (
        "",
        CHANGE + '{ from = "new", to = "usual", add = 2 } ]\n',
        "change: add: needs a number from -1 to 1, got 2",
    ),
    ("", CHANGE + '{ from = "gone", to = "usual", add = 0.1 } ]\n', 'from: unknown state "gone"'),
    (
        "",
        CHANGE + '{ from = "new", to = "usual", add = 0.1, balance = "newer" } ]\n',
        'unknown state "newer"',
    ),
    ("", CHANGE + '{ from = "new", to = "usual", add = 0.1, balance = [] } ]\n', "balance: is an empty list"),
    (
        "",
        CHANGE + '{ from = "new", to = "usual", add = 0.1, balance = "usual" } ]\n',
        "it cannot balance itself",
    ),
    (
        "",
        IMPOSSIBLE + '[["usual","new"]]\n' + CHANGE + '{ from = "usual", to = "new", add = 0.1 } ]\n',
        'the move from "usual" to "new" is declared impossible in [moves]',
    ),
    ("", '[[adjustment]]\nperiod = "2026-12"\nstate = "usual"\ncustomers = 5\n', "reason: missing"),
    (
        "",
        '[[adjustment]]\nperiod = "2026-08"\nstate = "usual"\ncustomers = 5\nreason = "r"\n',
        "is not ahead",
    ),
    ("", '[[adjustment]]\nperiod = "2026-12"\nstate = "gone"\ncustomers = 5\nreason = "r"\n', 'state "gone"'),
    ("", "[budget]\n", "[budget] file: missing"),
    ("", "[people]\nchecked_by = 3\n", "checked_by: needs a text, got a whole number (3)"),
    ("[study]", "state = 1\n[study]", "valid TOML"),
]


@pytest.mark.parametrize(("old", "new", "text"), EVENT_REFUSALS, ids=lambda v: None)
def test_refusals_of_an_events_study(tmp_path, old, new, text):
    assert not old or old in EVENTS
    assert text in refused(tmp_path, EVENTS.replace(old, new, 1) if old else EVENTS + new)


HISTORY_REFUSALS = [
    (
        'state = "state"',
        'state = "state"\njoins = ["x"]',
        'joins: has no meaning in the layout "history"; it belongs',
    ),
    ('state = "state"', "", "[input] state: missing; it needs a text"),
    (
        'state = "state"',
        'state = "state"\non_gap = "brake"',
        'on_gap: unknown rule "brake" (did you mean "break"?)',
    ),
    ('state = "state"', 'state = "state"\non_gap = "out"', 'on_gap: unknown rule "out"'),
    ('state = "state"', 'state = "state"\non_absent = "in"', 'on_absent: unknown exit "in"'),
    ('name = "in"', 'name = "in"\nwhen = { silent_for = 1 }', 'when: has no meaning in the layout "history"'),
    ('name = "in"', 'name = "in"\nrole = "away"', "role: no state is live"),
    ("", '[events]\nignore = ["x"]\n', '[events] ignore: has no meaning in the layout "history"'),
    ("", '[value]\ncurrency = "GBP"\nper_period = "observed"\n', '"observed" needs the column of the money'),
    ("[study]\nperiod", "[study]\nhorizon = 1\nperiod", None),
    ('period = "month"', 'period = "step"', 'as_of: has no meaning with period = "step"'),
    (
        'period = "month"\nas_of = "2026-09-30"',
        'period = "step"\ncalendar = "c.csv"',
        "calendar: cannot be used with",
    ),
    ('layout = "history"', 'layout = "spells"', "[input] end: missing"),
    ('layout = "history"', 'layout = "wide"', 'time: has no meaning in the layout "wide"'),
    ('layout = "history"', 'layout = "counts"', 'customer: has no meaning in the layout "counts"'),
]


@pytest.mark.parametrize(("old", "new", "text"), HISTORY_REFUSALS, ids=lambda v: None)
def test_refusals_of_the_other_layouts(tmp_path, old, new, text):
    changed = HISTORY.replace(old, new, 1) if old else HISTORY + new
    if text is None:  # the unchanged text is a valid study: the refusals come from the changes
        assert read_study(written(tmp_path, changed)).horizon == 1
    else:
        assert text in refused(tmp_path, changed)


def test_tables_that_must_be_there(tmp_path):
    assert "study: missing; a study file needs [study]" in refused(tmp_path, "")
    without = HISTORY[: HISTORY.index("[[state]]")]
    assert "state: missing; a study file needs [[state]]" in refused(tmp_path, without)
    assert "needs at least one [[state]]" in refused(tmp_path, "state = []\n" + without)
    assert "state: needs tables headed [[state]], got a whole number (3)" in refused(
        tmp_path, "state = [3]\n" + without
    )
    assert "study: needs a table [study], got a whole number (1)" in refused(
        tmp_path, "study = 1\n" + HISTORY[HISTORY.index("[input]") :]
    )


def test_files_that_cannot_be_read(tmp_path):
    with pytest.raises(StudyError, match="none.toml: cannot read the study file: No such file"):
        read_study(tmp_path / "none.toml")
    (tmp_path / "latin.toml").write_bytes('title = "caf\xe9"'.encode("latin-1"))
    with pytest.raises(StudyError, match="latin.toml: the study file is not UTF-8 text"):
        read_study(tmp_path / "latin.toml")
    assert "is not valid TOML" in refused(tmp_path, "[study\n") and "line 1" in refused(tmp_path, "[study\n")


SIDE_FILES = [
    ("period,kind,state\n", 'the header of "plan.csv" lacks "customers"'),
    ("period,kind,state,customers,extra\n", 'has the unknown column "extra"'),
    (
        "period,kind,state,customers\n2026-10,joined,new\n",
        "plan.csv, line 2, column customers: the row does not have 4",
    ),
    (
        "period,kind,state,customers\n2026-10,joined,new,many\n",
        'column customers: needs a number, got "many"',
    ),
    (
        "period,kind,state,customers\n2026-10,joined,new,-1\n",
        "column customers: needs a number of at least 0, got -1",
    ),
    (
        "period,kind,state,customers\n2026-10,joins,new,1\n",
        'column kind: unknown "joins" (did you mean "joined"?)',
    ),
    ("period,kind,state,customers\n2026/10,joined,new,1\n", 'column period: "2026/10" is not a month label'),
    ("period,kind,state,customers\n2026-10,joined,gone,1\n", 'column state: unknown "gone"'),
]


@pytest.mark.parametrize(("rows", "text"), SIDE_FILES, ids=lambda v: None)
def test_refusals_of_a_side_file_name_its_line_and_column(tmp_path, rows, text):
    (tmp_path / "plan.csv").write_text(rows)
    assert text in refused(tmp_path, EVENTS + '[joiners]\nmethod = "planned"\nfile = "plan.csv"\n')


def test_refusals_of_an_own_calendar(tmp_path):
    def with_calendar(rows: str, horizon: int = 1) -> str:
        (tmp_path / "own.csv").write_text("label,start,end\n" + rows)
        head = f'calendar = "own.csv"\nhorizon = {horizon}\n[input]'
        return refused(tmp_path, HISTORY.replace("2026-09-30", "2026-01-28").replace("[input]", head))

    good = "P1,2026-01-01,2026-01-28\nP2,2026-01-29,2026-03-04\n"
    assert 'own.csv, line 2, column end: "soon" is not a date' in with_calendar("P1,2026-01-01,soon\n")
    assert "without gaps" in with_calendar("P1,2026-01-01,2026-01-28\nP2,2026-02-01,2026-03-04\n")
    assert "3 periods ahead are wanted, but the calendar file ends 2026-03-04, 1 ahead" in with_calendar(
        good, 3
    )
    assert "as_of: 2026-01-28 is outside the calendar file" in with_calendar("P1,2026-02-01,2026-02-28\n")
    (tmp_path / "own.csv").write_bytes(b"label\xff")
    head = 'calendar = "own.csv"\n[input]'
    assert "it is not UTF-8 text" in refused(tmp_path, HISTORY.replace("[input]", head))


# ---- overrides ----
@pytest.mark.parametrize(
    ("key", "text"),
    [
        ("level", '"level" names no setting; write table.key'),
        ("study.title.x", '"study.title.x" cannot be set: "title" is a value, not a table'),
        ("state.when", '"state.when" cannot be set: name the state and its key'),
        ("state.gne.when", 'there is no "gne" (did you mean "gone"?)'),
    ],
)
def test_overrides_that_have_no_place(key, text):
    data = {"study": {"title": "x"}, "state": [{"name": "gone"}]}
    with pytest.raises(CallError) as caught:
        apply_overrides(data, {key: "1"})
    assert text in str(caught.value)


def test_an_override_without_a_place_is_refused_with_the_name_of_the_file(tmp_path):
    with pytest.raises(StudyError, match='shop.toml: "level" names no setting'):
        read_study(written(tmp_path, EVENTS), overrides={"level": 1})


def test_overrides_leave_their_input_alone():
    data = {"study": {"level": 0.9}}
    assert apply_overrides(data, {"study.level": "x y"}) == {"study": {"level": "x y"}}
    assert data == {"study": {"level": 0.9}}


# ---- which rule can be reached ----
@pytest.mark.parametrize(
    ("a", "b", "expected"),
    [
        (Condition("at_least", ("x",), k=1, n=3), Condition("at_least", ("x",), k=2, n=2), True),
        (Condition("at_least", ("x",), k=3, n=3), Condition("at_least", ("x",), k=2, n=2), False),
        (Condition("at_most", ("x",), k=2, n=0), Condition("at_most", ("x",), k=2, n=1), True),
        (Condition("at_most", ("x",), k=1, n=0), Condition("at_most", ("x",), k=2, n=1), False),
        (Condition("spent_at_least", k=2, amount=9), Condition("spent_at_least", k=2, amount=5), True),
        (Condition("tenure_below", k=1), Condition("tenure_below", k=2), True),
        (Condition("tenure_below", k=3), Condition("tenure_below", k=2), False),
        (Condition("expired_for", k=2), Condition("expired_for", k=0), True),
        (Condition("due_within", k=1), Condition("due_within", k=3), True),
        (Condition("last_event", ("x",), ("x", "y")), Condition("last_event", ("x", "y"), ("y", "x")), True),
        (Condition("last_event", ("x",), ("x", "y")), Condition("last_event", ("x",), ("x", "z")), False),
        (Condition("silent_for", ("x",), k=3), Condition("silent_for", ("y",), k=2), False),
        (Condition("due_within", k=1), Condition("expired_for", k=0), False),
    ],
)
def test_what_one_condition_says_about_another(a, b, expected):
    assert implies(a, b) is expected


def test_a_state_stays_reachable_through_one_free_alternative(tmp_path):
    text = EVENTS.replace(
        "{ tenure_below = 1 }", '[ { silent_for = 4, of = ["bought"] }, { due_within = 1 } ]'
    )
    assert len(read_study(written(tmp_path, text)).rules[2].when) == 2


# ---- a bare data file ----
def test_a_data_file_of_states_becomes_a_study(tmp_path):
    path = written(
        tmp_path, "customer,period,state\n1,2026-01,in\n1,2026-02,out\n2,2026-02,in\n", "panel.csv"
    )
    study = default_study(path, exits=["out"])
    assert study.states == States(["in", "out"], exits=["out"]) and study.calendar.kind == "month"
    assert study.as_of == datetime.date(2026, 2, 28) and study.input.on_absent is None
    absent = default_study(path, exits=["gone"], overrides={"study.horizon": 3})
    assert absent.states.names == ("gone", "in", "out") and absent.input.on_absent == "gone"
    assert absent.horizon == 3 and absent.origin_of["study.horizon"] == "option"


@pytest.mark.parametrize(
    ("label", "kind"),
    [
        ("7", "step"),
        ("2026-Q3", "quarter"),
        ("2026-W39", "week"),
        ("2026-09-30", "day"),
        ("2026-09", "month"),
    ],
)
def test_the_kind_of_period_is_read_off_its_labels(tmp_path, label, kind):
    path = written(tmp_path, f"customer,period,state\n1,{label},in\n", "panel.csv")
    assert default_study(path).calendar.kind == kind


def test_a_data_file_of_events_becomes_a_study(tmp_path):
    rows = "customer,time,event\n1,2026-01-05,joined\n1,2026-03-09 10:00,left\n2,2026-01-07,joined\n"
    study = default_study(written(tmp_path, rows, "log.csv"), exits=["left"])
    assert study.states == States(["left", "joined"], exits=["left"])
    assert study.as_of == datetime.date(2026, 3, 9) and study.returns_of("left") == ("joined",)
    assert [len(rule.when) for rule in study.rules] == [1, 0]


def test_a_data_file_in_parquet(tmp_path):
    import pandas as pd

    path = tmp_path / "panel.parquet"
    pd.DataFrame({"customer": [1, 2], "period": [1, 1], "state": ["in", "in"]}).to_parquet(path)
    assert default_study(path).states.names == ("in",)


@pytest.mark.parametrize(
    ("rows", "exits", "error", "text"),
    [
        (
            "id,month\n1,2\n",
            [],
            InputError,
            'columns are "id", "month". Without a study file the columns must be',
        ),
        ("customer,period,state\n1,1,\n", [], InputError, 'the column "state" is empty'),
        (
            "customer,period,state\n1,Sept,in\n",
            [],
            InputError,
            'the column "period" holds "Sept"; without a study',
        ),
        ("customer,period,state\n1,1,in\n", ["a", "b"], CallError, '--exit "a", "b": no row of'),
        ("customer,time,event\n1,2026-01-05,joined\n", ["left"], CallError, '--exit "left": no event of'),
        ("customer,time,event\n1,05.01.26,joined\n", [], InputError, 'the column "time" holds no date'),
        (
            "customer,period,state\n" + "".join(f"1,1,s{i}\n" for i in range(51)),
            [],
            InputError,
            "51 different values",
        ),
    ],
)
def test_refusals_of_a_data_file(tmp_path, rows, exits, error, text):
    with pytest.raises(error) as caught:
        default_study(written(tmp_path, rows, "data.csv"), exits=exits)
    assert text in str(caught.value)


def test_a_data_file_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match="none.csv: cannot read the data file"):
        default_study(tmp_path / "none.csv")
    assert is_data_file("a/b.CSV.gz") and not is_data_file("shop.toml")


def test_the_demo_study_is_valid(tmp_path):
    demo = Path(__file__).parents[1] / "demo_data"
    for name in ("veg_box.toml", "budget.csv", "planned_joiners.csv"):
        shutil.copy(demo / name, tmp_path)
    study = read_study(tmp_path / "veg_box.toml")
    assert study.states.exits == ("cancelled", "card_lapsed") and study.warm_up == 2 and study.budget
    planned = read_study(
        tmp_path / "veg_box.toml",
        overrides={"joiners.method": "planned", "joiners.file": "planned_joiners.csv"},
    )
    assert planned.joiners.rows and isinstance(planned, Study)


def test_every_refusal_is_of_the_family():
    assert issubclass(StudyError, CohortflowError)
