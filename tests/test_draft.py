"""`draft`: profiles of extracts, the study they give, and that nothing is guessed silently."""

import random
import subprocess
import sys
import tomllib
from datetime import date, timedelta
from pathlib import Path

import pytest

import cohortflow as cf
from cohortflow.errors import CallError, InputError, OutputError
from cohortflow.history.look import profile
from cohortflow.runs.draft import draft
from cohortflow.runs.draft_states import quoted
from cohortflow.runs.folder import run

ROOT = Path(__file__).parents[1]


def log(path: Path, *, delimiter: str = ",", comma: bool = False, form: str = "%Y-%m-%d", names=None) -> Path:
    """60 members: start, bought each month; every second one stops and then nothing follows."""
    words = {"start": "start", "bought": "bought", "stop": "stop", **(names or {})}
    rng, rows = random.Random(5), []
    for m in range(60):
        day, end = date(2024, 1, 2) + timedelta(days=7 * (m % 20)), rng.randrange(3, 14)
        rows.append((f"{m:04d}", day, words["start"], ""))
        for k in range(1, end):
            rows.append((f"{m:04d}", day + timedelta(days=30 * k), words["bought"], f"{10 + k}.{k % 10}5"))
        if m % 2:
            rows.append((f"{m:04d}", day + timedelta(days=30 * end + 3), words["stop"], ""))
    lines = [delimiter.join(["member", "at", "what", "paid", "town"])]
    for who, when, what, paid in rows:
        money = paid.replace(".", ",") if comma else paid
        lines.append(
            delimiter.join([who, when.strftime(form), what, money, "nord" if int(who) % 3 else "süd"])
        )
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def uncommented(text: str, *marks: str) -> str:
    """What a person does who agrees with the proposals that begin with one of `marks`."""
    wanted = tuple(f"# {m}" for m in marks)
    lines = [line.removeprefix("# ") if line.startswith(wanted) else line for line in text.splitlines()]
    return "\n".join(lines) + "\n"


def test_the_demo_extract_gives_a_study_that_checks_and_fits_once_its_exits_are_confirmed(tmp_path):
    files = sorted((ROOT / "demo_data").glob("events-202[56].csv.gz"))
    made = draft(files, out=tmp_path / "veg.toml")
    assert set(made.exits) == {"cancelled", "CANCELLED ", "Cancel"}  # the three spellings of generate.py
    assert made.profile.roles == {
        "customer": "member", "time": "at", "event": "what", "event_id": "row_id"
    }  # fmt: skip
    assert "exit" not in [rule.role for rule in cf.read_study(made.path).rules]
    made.path.write_text(
        uncommented(made.text, 'role = "exit"   #', "joins =", "log_start =", "amount =", "segments =")
    )
    study = cf.read_study(made.path)
    assert set(study.states.exits) == {"cancelled", "Cancel"}
    assert study.as_of == date(2026, 9, 30) and study.input.joins == ("joined",)
    done = run(study, upto="fit")
    assert done.check.rows("used") > 250_000 and done.fit.counts["cancelled"].sum() > 1000


def test_a_log_proposes_its_exit_its_joins_its_money_and_its_silence_and_sets_none_of_them(tmp_path):
    made = draft([log(tmp_path / "log.csv")], out=tmp_path / "log.toml")
    as_written = tomllib.loads(made.text)
    assert [s.get("role", "live") for s in as_written["state"]] == ["live"] * 3
    assert as_written["input"]["files"] == ["log.csv"] and "joins" not in as_written["input"]
    assert made.exits == ("stop",)
    for proposal in (
        '# role = "exit"   # CONFIRM: nothing follows it in 100%',
        '# joins = ["start"]',
        '# amount = "paid"',
        '# segments = ["town"]',
        '# when = { silent_for = 1, of = ["bought"] }',
    ):
        assert proposal in made.text
    assert run(made.path, upto="check").check.rows("used") > 0  # valid as it stands
    silence = ("[[state]]", 'name = "no bought', "when = { silent_for =")
    made.path.write_text(
        uncommented(made.text, 'role = "exit"', "joins =", "amount =", "segments =", *silence)
    )
    study = cf.read_study(made.path)
    assert study.states.exits == ("stop", "no bought for 1 month")
    done = run(study, upto="fit")
    assert done.check.rows("rejected") == 0 and done.fit.counts["stop"].sum() > 0


def test_semicolons_decimal_commas_and_another_encoding_are_written_down(tmp_path):
    path = log(tmp_path / "kunden.csv", delimiter=";", comma=True, form="%d.%m.%Y")
    path.write_bytes(path.read_text(encoding="utf-8").encode("cp1252"))
    made = draft([path], out=tmp_path / "sub" / "kunden.toml")
    spec = tomllib.loads(made.text)["input"]
    assert (spec["delimiter"], spec["decimal"], spec["encoding"]) == (";", ",", "cp1252")
    assert spec["files"] == ["../kunden.csv"]
    made.path.write_text(uncommented(made.text, 'role = "exit"   #', "amount =", "segments ="))
    done = run(made.path, upto="fit")
    assert done.check.rows("rejected") == 0
    assert {v for values in done.tally.meta.segments for v in values} == {"nord", "süd"}
    assert (
        done.tally.table("amounts")["total"].sum() % 10 == 5 or done.tally.table("amounts")["total"].sum() > 0
    )


def history_rows(label=lambda t: f"2026-{t:02d}") -> list[str]:
    rows = []
    for m in range(50):
        for t in range(1, 9):
            gone = m % 4 == 0 and t > 3 + m % 5
            rows.append(f"m{m},{label(t)},{'left' if gone else 'fresh' if t == 1 else 'steady'}")
            if gone:
                break
    return rows


def test_a_history_proposes_the_state_after_which_nothing_follows(tmp_path):
    (tmp_path / "panel.csv").write_text("\n".join(["id,month,state", *history_rows()]))
    made = draft([tmp_path / "panel.csv"], out=tmp_path / "panel.toml")
    assert made.profile.layout == "history" and made.exits == ("left",)
    study = cf.read_study(made.path)
    assert study.as_of == date(2026, 8, 31) and study.states.names == ("steady", "fresh", "left")
    assert run(study, upto="check").check.rows("used") > 0
    made.path.write_text(uncommented(made.text, 'role = "exit"   #'))
    assert run(made.path, upto="fit").fit.counts["left"].sum() == 13  # m = 0, 4, .. 48
    made.path.write_text(
        uncommented(made.text, 'role = "exit"', "on_absent =", "[[state]]", 'name = "no row"')
    )
    assert cf.read_study(made.path).states.exits == ("left", "no row")


def test_steps_month_ends_and_quarters_are_histories_too(tmp_path):
    ends = {t: (date(2026, t % 12 + 1, 1) - timedelta(days=1)).isoformat() for t in range(1, 9)}
    quarter = {t: f"{2024 + t // 4}-Q{t % 4 + 1}" for t in range(1, 9)}
    kinds = (("period", str, "step"), ("day", ends.get, "month"), ("quarter", quarter.get, "quarter"))
    for head, label, period in kinds:
        (tmp_path / "panel.csv").write_text("\n".join([f"id,{head},state", *history_rows(label)]))
        made = draft([tmp_path / "panel.csv"], out=tmp_path / "panel.toml", force=True)
        assert (made.profile.layout, made.profile.period) == ("history", period), head
        made.path.write_text(uncommented(made.text, 'role = "exit"   #'))
        assert run(made.path, upto="fit").fit.counts["left"].sum() == 13


def test_a_wide_table_spells_and_bare_counts_are_told_apart(tmp_path):
    months = [f"2026-{t:02d}" for t in range(1, 7)]
    wide = [",".join(["id", *months]), *(f"c{i},a,a,b,a,b,{'gone' if i % 3 else 'a'}" for i in range(40))]
    (tmp_path / "wide.csv").write_text("\n".join(wide))
    made = draft([tmp_path / "wide.csv"], out=tmp_path / "wide.toml")
    assert made.profile.layout == "wide" and cf.read_study(made.path).states.names == ("a", "b", "gone")
    spells = [
        "member,start,end,plan",
        *(f"m{i},2026-01-0{1 + i % 9},{'' if i % 2 else '2026-03-05'},p{i % 3}" for i in range(40)),
    ]
    (tmp_path / "spells.csv").write_text("\n".join(spells))
    made = draft([tmp_path / "spells.csv"], out=tmp_path / "spells.toml")
    assert made.profile.layout == "spells"
    assert made.profile.roles == {"customer": "member", "time": "start", "end": "end", "state": "plan"}
    counts = ["month,from,to,n", "2026-01,a,a,90", "2026-01,a,left,10", "2026-02,a,a,80", "2026-02,a,left,10"]
    (tmp_path / "counts.csv").write_text("\n".join(counts))
    made = draft([tmp_path / "counts.csv"], out=tmp_path / "counts.toml")
    assert made.profile.layout == "counts" and made.exits == ("left",)
    made.path.write_text(uncommented(made.text, 'role = "exit"   #'))
    assert run(made.path, upto="fit").fit.counts.loc["a", "left"] == 20


def test_offsets_ask_for_the_time_zone(tmp_path):
    path = log(tmp_path / "log.csv", form="%Y-%m-%dT08:00:00+02:00")
    made = draft([path], out=tmp_path / "log.toml")
    assert 'timezone = "UTC"   # CONFIRM' in made.text
    assert run(made.path, upto="check").check.rows("rejected") == 0


def test_a_mistyped_year_does_not_move_the_last_day(tmp_path):
    path = log(tmp_path / "log.csv")
    path.write_text(path.read_text() + "0001,2199-01-01,bought,3.05,nord\n")
    made = draft([path], out=tmp_path / "log.toml")
    assert made.profile.when.after >= 1 and tomllib.loads(made.text)["study"]["as_of"] < "2026"


def test_hostile_names_stand_as_plain_text(tmp_path):
    bad = {"stop": 'st"op\\]; drop', "bought": "<script>", "start": "=1+1"}
    path = log(tmp_path / "a [1].csv", names=bad)
    path.write_text(
        path.read_text().replace('st"op', 'st""op').replace(',st""op\\]; drop', ',"st""op\\]; drop"')
    )
    made = draft([path], out=tmp_path / "log.toml")
    names = [s["name"] for s in tomllib.loads(made.text)["state"]]
    assert set(names) == set(bad.values())
    assert run(made.path, upto="check").check.rows("used") > 0
    assert quoted("a\nb\x7f") == '"a\\nb\\u007f"'


def test_nothing_is_overwritten_and_a_dry_run_writes_nothing(tmp_path):
    path = log(tmp_path / "log.csv")
    target = tmp_path / "log.toml"
    assert draft([path], out=target, write=False).text and not target.exists()
    target.write_text("mine")
    with pytest.raises(OutputError, match="exists already; choose another name, or add --force"):
        draft([path], out=target)
    assert target.read_text() == "mine"
    draft([path], out=target, force=True)
    assert target.read_text() != "mine" and sorted(p.name for p in tmp_path.iterdir()) == [
        "log.csv",
        "log.toml",
    ]
    with pytest.raises(OutputError, match="is a folder"):
        draft([path], out=tmp_path)
    with pytest.raises(OutputError, match="cannot be written"):
        draft([path], out=path / "x.toml")


def refusal(tmp_path: Path, text: str, match: str, **options) -> None:
    (tmp_path / "x.csv").write_text(text)
    with pytest.raises((InputError, CallError), match=match):
        draft([tmp_path / "x.csv"], out=tmp_path / "x.toml", **options)
    assert not (tmp_path / "x.toml").exists()


def test_what_cannot_be_told_is_refused_with_the_option_to_give(tmp_path):
    refusal(tmp_path, "a,b\nx,y\nx,z\n", "no column looks like the customers")
    refusal(tmp_path, "member,b\nx,y\nv,z\n", "no column looks like dates or periods")
    refusal(
        tmp_path, "member,at,b\nx,2026-01-02,1\nv,2026-01-03,2\n", "no column looks like events or states"
    )
    refusal(tmp_path, "member,at,what\nx,03/04/2026,a\nv,05/04/2026,b\n", "cannot tell day from month")
    refusal(tmp_path, "member,at,what\n", "no rows under the header line")
    refusal(tmp_path, "member,at,what\nx,2026-01-02,a\n", 'Unknown role "who"', columns={"who": "member"})
    refusal(tmp_path, "id,month,state\na,2026-01,all_live\nb,2026-02,x\n", "No study can be drafted")
    refusal(
        tmp_path,
        "member,period,what\nx,a,b\ny,c,d\n",
        "holds no dates, periods or whole numbers",
        columns={"time": "period"},
    )


def test_a_wrong_guess_is_put_right_by_naming_the_column(tmp_path):
    path = log(tmp_path / "log.csv")
    path.write_text(path.read_text().replace("member,at,what,paid,town", "who,at,what,paid,town"))
    found = profile([path], columns={"customer": "who", "event": "town"}, date_format="%Y-%m-%d")
    assert found.roles["event"] == "town" and found.when.date_format == "%Y-%m-%d"


def test_the_command_writes_the_study_and_shows_the_profile(tmp_path):
    log(tmp_path / "log.csv")
    base = [sys.executable, "-m", "cohortflow.cli", "draft", "log.csv"]
    env = {"PYTHONPATH": str(ROOT), "PATH": ""}

    def go(*more: str):
        return subprocess.run([*base, *more], cwd=tmp_path, env=env, capture_output=True, text=True)

    dry = go("--dry-run")
    assert dry.returncode == 0 and "[[state]]" in dry.stdout and not (tmp_path / "study.toml").exists()
    done = go()
    assert done.returncode == 0 and 'Mostly nothing follows "stop"' in done.stdout
    assert "lines say CONFIRM. Next: cohortflow check study.toml" in done.stderr
    assert max(map(len, done.stdout.splitlines())) <= 80
    again = go()
    assert again.returncode == 2 and "exists already" in again.stderr
    assert go("--force", "--format", "csv").stdout.startswith("name,rows,customers,begins,ends")
    assert '"kind": "profile"' in go("--force", "--format", "json").stdout
    wrong = go("--force", "--column", "customer")
    assert wrong.returncode == 2 and "needs ROLE=NAME" in wrong.stderr
