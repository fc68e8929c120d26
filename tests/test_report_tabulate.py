"""The contract's tables as tables to read."""

import pandas as pd
import pytest

from cohortflow.report import tabulate
from cohortflow.report.table import plain_text
from tests import report_fixtures as made
from tests.test_report_chart_rollforward import frame as roll

S = made.VEG_BOX


def test_the_accounting_uses_the_total_lines_when_there_are_some():
    rows = made.accounting()
    both = pd.concat([rows, rows.assign(file="all")])
    assert tabulate.accounting_table(both) == tabulate.accounting_table(rows)


def test_the_accounting_speaks_in_words_and_adds_up():
    table = tabulate.accounting_table(made.accounting())
    assert ("set aside", "after the customer had left", "50", "41") in table.rows
    counts = [int(r[2].replace(",", "")) for r in table.rows]
    assert counts[0] == sum(counts[1:])


def test_moves_leave_out_what_cannot_happen_and_flag_what_was_not_seen():
    rows = made.transitions(S)
    rows.loc[(rows["from"] == "quiet") & (rows["to"] == "paused"), ["count", "probability", "note"]] = [
        0,
        0.0,
        "sampling_zero",
    ]
    table = tabulate.moves_table(rows)
    assert not any(r[:2] == ("weekly", "taster") for r in table.rows)
    assert next(r for r in table.rows if r[:2] == ("quiet", "paused"))[6] == "possible, not seen"


def test_the_square_never_prints_a_rate_of_zero_without_its_limit():
    table = tabulate.matrix_table(made.transitions(S), S)
    cells = [c for row in table.rows for c in row[2:]]
    assert "0%" not in cells and "-" in cells and any(c.startswith("(<") for c in cells)


def test_a_row_without_data_is_said_to_have_none():
    rows = made.transitions(made.SMALL)
    rows.loc[rows["from"] == "fresh", ["probability", "low", "high"]] = [float("nan"), 0.0, 1.0]
    table = tabulate.matrix_table(rows, made.SMALL)
    assert table.rows[0][2:] == ("no data", "no data", "no data")


def test_every_column_of_the_roll_forward_foots():
    table = tabulate.rollforward_table(made.rollforward(S))
    numbers = [[int(c.replace(",", "").replace("+", "")) for c in row[1:]] for row in table.rows]
    for column in zip(*numbers, strict=True):
        assert sum(column[:-1]) == column[-1]
    heads = [h.split(" ")[0] for h in table.heads[1:]]
    assert heads[:4] == ["2026-08", "2026-09", "2026-10", "2026-11"] and "projected" in table.heads[4]


def test_openings_are_the_closings_before():
    rows = tabulate.rollforward_table(made.rollforward(S)).rows
    assert rows[0][2:] == rows[-1][1:-1]


def test_lost_and_moved_out_take_away():
    # 10.3 + 2.2 - 5.4 - 1.2 + 3.0 - 4.7 = 4.2 must print as 105 - 100 = 5: floors 10 2 -6 -2 3 -5 make 2, the
    # three largest remainders (card .8, cancelled .6, joined .3) take one each
    rows = dict((r[0], r[1]) for r in tabulate.rollforward_table(roll()).rows)
    assert (
        rows["left: cancelled"] == "-5"
        and rows["went out to other states"] == "-5"
        and rows["joined"] == "+11"
    )
    assert rows["opening"] == "100" and rows["closing"] == "105"


def test_an_unknown_forecast_is_not_rounded_into_a_number():
    rows = roll(lines=[("opening", "", 5), ("joined", "", float("nan")), ("closing", "", float("nan"))])
    assert [r[1] for r in tabulate.rollforward_table(rows).rows] == ["5", "not known", "not known"]


def test_where_it_settles_sets_today_beside_it():
    table = tabulate.long_run_table(made.long_run(S), made.projection(S))
    assert table.heads == (
        "state",
        "share today",
        "settled share",
        "settled customers",
        "share of those remaining",
    )
    assert tabulate.long_run_table(made.long_run(S)).heads[1] == "settled share"


def test_starts_from_single_states_stay_out():
    rows = made.long_run(S)
    extra = rows[rows["measure"] == "settled_mix"].assign(**{"from": "quiet", "value": 0.5})
    assert tabulate.long_run_table(pd.concat([extra, rows])) == tabulate.long_run_table(rows)


def test_times_without_end_are_never():
    rows = made.exits(S)
    rows.loc[rows["measure"] == "mean_time", ["value", "low", "high"]] = [
        float("inf"),
        float("nan"),
        float("nan"),
    ]
    assert all(r[1] == "never" for r in tabulate.exits_table(rows, kind="month").rows)


def test_immature_ages_are_marked():
    table = tabulate.retention_table(made.retention(), kind="week")
    assert (
        table.heads[0] == "weeks since joining" and table.rows[-1][4] == "immature" and table.rows[0][4] == ""
    )


@pytest.mark.parametrize("states", [S, made.HOSTILE, made.FIFTEEN])
def test_everything_fits_a_terminal(states):
    names = ("all_live", *states.remaining, *states.exits)
    made_tables = [
        tabulate.matrix_table(made.transitions(states), states), tabulate.moves_table(made.transitions(states)),
        tabulate.outlook_table(made.projection(states), quantities=names),
        tabulate.base_table(made.projection(states), quantities=names),
        tabulate.rollforward_table(made.rollforward(states)), tabulate.exits_table(made.exits(states), kind="month"),
        tabulate.long_run_table(made.long_run(states), made.projection(states)),
    ]  # fmt: skip
    from cohortflow.report.text import width

    assert all(width(line) <= 80 for t in made_tables for line in plain_text(t).split("\n"))
