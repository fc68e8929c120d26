"""How forecasts did, by hand."""

from dataclasses import replace

import pandas as pd
import pytest

from cohortflow.runs.outcome import against_budget, calibration, counted, outcome, outcome_lines
from cohortflow.study.parts import BudgetRow
from tests.comparison_cases import PLAIN, opened, tally

# 10 here; 2 leave in period 1 and 3 of 8 in period 2, one of the five left goes away in period 3
PATHS = {"hg": 2, "hhg": 3, "hhha": 1, "hhhh": 4}


def test_what_was_counted():
    counts = tally(PATHS, last=3)
    found = counted(counts, {"known": ("here", "away")}, 1, 3)
    assert found == {"here": 4.0, "away": 1.0, "all_live": 4.0, "known": 5.0, "gone": 3.0}  # since period 1


def test_actual_against_forecast_by_hand():
    # from period 1: 8 here, 0.8 kept: 6.4 and 5.12; counted 5 at the end of period 2, 4 (one is away) of 3
    earlier = opened(tally(PATHS, last=1), name="q1")
    table = outcome(earlier, tally(PATHS, last=3)).set_index(["quantity", "periods_ahead"])
    one, two = table.loc[("all_live", 1)], table.loc[("all_live", 2)]
    assert (one["run"], one["period"], one["actual"], two["actual"]) == ("q1", "2", 5.0, 4.0)
    assert one["forecast"] == pytest.approx(6.4) and one["difference"] == pytest.approx(5 - 6.4)
    assert one["relative"] == pytest.approx((5 - 6.4) / 6.4)
    assert two["difference"] == pytest.approx(4 - 5.12)
    gone = table.loc[("gone", 1)]  # 1.6 expected to leave, 3 did
    assert gone["forecast"] == pytest.approx(1.6) and gone["actual"] == 3.0
    assert one["inside"] == (one["low"] <= 5 <= one["high"])
    assert pd.isna(table.loc[("away", 1), "relative"])  # nobody expected there: no share of nothing


def test_a_period_that_was_not_forecast_or_not_counted_has_no_row():
    earlier = opened(tally(PATHS, last=1))
    assert set(outcome(earlier, tally(PATHS, last=2))["period"]) == {"2"}
    assert not len(outcome(earlier, tally(PATHS, last=1)))


def test_a_band_that_is_not_known_holds_nothing():
    earlier = opened(tally(PATHS, last=1))
    earlier = replace(earlier, projection=earlier.projection.assign(low=float("nan")))
    table = outcome(earlier, tally(PATHS, last=3))
    assert table["inside"].isna().all() and not len(calibration([table]))


def test_lines_of_the_live_base_by_hand():
    earlier = opened(tally(PATHS, last=1), name="q1")
    rows = [
        ("all", str(p), "forecast", "all_live", line, exit_, n)
        for p, gone, closing in ((2, 1.6, 6.4), (3, 1.28, 5.12))
        for line, exit_, n in (
            ("opening", "", closing + gone),
            ("lost", "gone", gone),
            ("closing", "", closing),
        )
    ]
    columns = ["segment", "period", "kind", "state", "line", "exit", "customers"]
    earlier = replace(earlier, rollforward=pd.DataFrame(rows, columns=columns))
    found = outcome_lines(earlier, tally(PATHS, last=3))
    found = found.set_index(["line", "exit"])
    assert found.loc[("opening", ""), ["forecast", "actual"]].tolist() == pytest.approx([8.0, 8.0])
    assert found.loc[("lost", "gone"), ["forecast", "actual"]].tolist() == pytest.approx([2.88, 3.0])
    assert found.loc[("moved_out", ""), ["forecast", "actual"]].tolist() == [0.0, 1.0]
    assert found.loc[("closing", ""), "difference"] == pytest.approx(4 - 5.12)
    assert found.index[0] == ("opening", "") and found.index[-1] == ("closing", "")
    assert not len(outcome_lines(earlier, tally(PATHS, last=1)))


def test_lines_foot():
    counts = tally({"hhg": 4, "hhhh": 5, "hahh": 3, "h": 1}, last=3)
    earlier = opened(tally({"hhg": 4, "hhhh": 5, "hahh": 3, "h": 1}, last=2))
    lines = outcome_lines(earlier, counts).set_index("line")
    for column in ("forecast", "actual"):
        own = lines[column]
        came = own[["joined", "returned", "moved_in", "unobserved_in"]].sum()
        went = own[["lost", "moved_out", "unobserved_out"]].sum()
        assert own["opening"] + came - went == pytest.approx(own["closing"], abs=1e-9)


def test_a_forecast_that_is_not_known_is_not_taken_for_nobody():
    # three are away at the end of period 2 and nobody has left that state: what they do is not known
    earlier = opened(tally({"hhg": 4, "hhhh": 5, "hhah": 3, "hg": 1}, last=2))
    lines = outcome_lines(earlier, tally({"hhg": 4, "hhhh": 5, "hhah": 3, "hg": 1}, last=3)).set_index("line")
    assert pd.isna(lines.loc["closing", "forecast"]) and lines.loc["closing", "actual"] == 8.0


def test_bare_counts_have_no_lines():
    import cohortflow as cf
    from tests.comparison_cases import STATES

    counts = cf.read_counts([(1, "here", "here", 8), (1, "here", "gone", 2), (2, "here", "here", 7)], STATES)
    earlier = opened(tally(PATHS, last=1))
    assert not len(outcome_lines(earlier, counts))


def test_the_budget_beside_counts_and_forecast():
    budget = (BudgetRow(1, "all_live", 9.0), BudgetRow(3, "all_live", 4.0), BudgetRow(9, "all_live", 4.0))
    run = opened(tally(PATHS, last=2), replace(PLAIN, budget=budget))
    table = against_budget(run).set_index("period")
    assert table.index.tolist() == ["1", "3"]  # period 9 is neither counted nor forecast
    past, ahead = table.loc["1"], table.loc["3"]
    assert (past["kind"], past["value"], past["difference"]) == ("actual", 8.0, -1.0) and pd.isna(
        past["inside"]
    )
    assert past["relative"] == pytest.approx(-1 / 9)
    # 5 there, 5 of 18 leave a period: 5 x 13/18
    assert ahead["kind"] == "forecast" and ahead["value"] == pytest.approx(5 * 13 / 18)
    assert ahead["inside"] == (ahead["low"] <= 4.0 <= ahead["high"])


def test_calibration_by_hand():
    one = pd.DataFrame(
        {"quantity": "a", "periods_ahead": [1, 2, 3], "level": 0.9, "inside": [True, True, False]}
    )
    two = pd.DataFrame(
        {"quantity": "a", "periods_ahead": [1, 2], "level": [0.9, 0.8], "inside": [True, False]}
    )
    table = calibration([one, two])
    whole = table[table["periods_ahead"].isna()].set_index("level")
    assert whole.loc[0.9, ["forecasts", "inside"]].tolist() == [4, 3] and whole.loc[0.9, "share"] == 0.75
    assert whole.loc[0.8, ["forecasts", "inside"]].tolist() == [1, 0]
    # Clopper-Pearson, 3 of 4 at 95 %: beta quantiles 0.025 of (3, 2) and 0.975 of (4, 1) = 0.975^(1/4)
    assert whole.loc[0.9, "high"] == pytest.approx(0.975**0.25)
    from scipy.stats import beta

    assert whole.loc[0.9, "low"] == pytest.approx(beta(3, 2).ppf(0.025))
    first = table[(table["periods_ahead"] == 1)].iloc[0]
    assert (first["forecasts"], first["inside"]) == (2, 2)
