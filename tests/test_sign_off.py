"""Subtotals, definitions and adjustments in a run folder; adjustments in roll-forward, subtotals and bridge."""

import json
from pathlib import Path

import pandas as pd
import pytest

import cohortflow as cf
from tests.comparison_cases import rows

STUDY = """\
[study]
period = "month"
as_of = "2026-06-30"
fiscal_year_start = 4
horizon = 4
[input]
layout = "history"
files = ["panel.csv"]
customer = "customer"
time = "period"
state = "state"
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
method = "none"
"""
ADJUSTED = (
    STUDY
    + """
[[adjustment]]
period = "2026-08"
state = "here"
customers = 10
reason = "a shop is bought"
"""
)


def made(home: Path, text: str, name: str) -> cf.runs.folder.Run:
    frame = rows({"hg": 4, "hhg": 4, "hhhh": 8, "hahh": 4}, last=3)
    months = {t: f"2026-{t + 3:02d}" for t in range(4)}
    frame.assign(period=frame["period"].map(months)).drop(columns="town").to_csv(
        home / "panel.csv", index=False
    )
    (home / "small.toml").write_text(text)
    return cf.run(home / "small.toml", upto="project", out=home / name)


@pytest.fixture(scope="module")
def both(tmp_path_factory: pytest.TempPathFactory):
    home = tmp_path_factory.mktemp("signed")
    return made(home, STUDY, "plain"), made(home, ADJUSTED, "adjusted")


def lines(table: pd.DataFrame, period: str, state: str = "all_live") -> pd.Series:
    return table[(table["period"] == period) & (table["state"] == state)].groupby("line")["customers"].sum()


def test_the_quarter_adds_up_its_months(both):
    # counted in March: 20; April: 12 (4 gone, 4 away), May: 12 (4 gone, 4 back), June: 12
    table = both[0].tables["rollforward_subtotals"]
    quarter = lines(table, "2026/27 Q1")
    assert quarter["opening"] == 20 and quarter["lost"] == 8 and quarter["closing"] == 12
    assert quarter["moved_out"] == 4 and quarter["moved_in"] == 4
    year = table[table["period"] == "2026/27"]
    assert set(year["kind"]) == {"both"} and not year["complete"].any()


def test_an_adjustment_is_a_line_that_closes_and_is_told(both):
    plain, adjusted = both
    assert not adjusted.warnings and adjusted.tables["adjustments"]["reason"].tolist() == ["a shop is bought"]
    assert "adjustments" not in plain.tables
    august = lines(adjusted.tables["rollforward"], "2026-08")
    assert august["adjustment"] == 10
    came, went = august["opening"] + august["moved_in"] + 10, august["lost"] + august["moved_out"]
    assert august["closing"] == pytest.approx(came - went, abs=1e-9)
    quarter = lines(adjusted.tables["rollforward_subtotals"], "2026/27 Q2")
    assert quarter["adjustment"] == 10
    log = json.loads((adjusted.path / "run.json").read_text())["assumptions"]
    assert log[-1] == {"assumption": "manual adjustment", "value": "+10 here in 2026-08: a shop is bought",
                       "set_by": "not approved by anybody named"}  # fmt: skip


def test_it_is_the_bridge_s_only_part(both):
    bridge = cf.compare(both[0].path, both[1].path).to_frame()
    august = bridge[(bridge["period"] == "2026-08") & (bridge["quantity"] == "all_live")].set_index("part")[
        "amount"
    ]
    assert august["adjustments"] == pytest.approx(10.0, abs=1e-12)
    assert august["this_forecast"] - august["last_forecast"] == pytest.approx(10.0, abs=1e-12)
    others = bridge[~bridge["part"].isin(["adjustments", "last_forecast", "this_forecast"])]
    assert (others["amount"].abs() < 1e-12).all()


def test_definitions_are_in_the_folder(both):
    names = pd.read_csv(both[0].path / "tables" / "definitions.csv")
    assert set(names["table"].dropna()) <= set(both[0].tables) | {"projection"}
    assert {"here", "away", "gone", "churn"} <= set(names["name"])
