"""A monthly subscription with pauses, failed payments and a cancellation that later noise must not undo.

The rules, first match wins: cancelled (the latest of cancelled, joined, rejoined is cancelled);
card_failed (the latest of payment_failed, paid is payment_failed, and nothing paid in this month and the
one before, and the stay began, or something was paid, by the end of the month before those); paused (the
latest of paused, resumed is paused); new (the month of joining or returning); owing (nothing paid this
month, and the stay began, or something was paid, by the end of last month); paying (everybody else).

The window. The log starts in January 2025. The largest k in a rule is 2 and joins are named, so the
warm-up is January and February: customers of unknown history count from March on. The extract can be
trusted to 20 August: July is the last complete month.

Customer by customer:
A01  joins on 5 January and pays every month: new, then paying to July. The payment of 5 August is in the
     incomplete month.
A02  joins on the last evening of January (31st, 23:30): January is the month of joining: new. February
     paid. Paused on 20 March, so March and April are paused (April has no payment, but paused comes
     before owing). Resumed on 31 May at 22:00: May is live again, nothing paid in May: owing. June paid.
     In July the payment fails; June was paid, so two silent months have not passed: owing, not
     card_failed.
A03  cancels on 15 April; the late debit of 20 April is in the month of the exit and used, but changes
     nothing. After it come a payment, a pause, a resumption and a failed payment: none is "rejoined", so
     the four are set aside as after_exit and the cancellation stands. The newsletter row is ignored by
     name.
A04  cancels on 5 April and rejoins on 25 April: at the end of April the latest is "rejoined", so April is
     no exit: paying, tenure 3, the stay goes on. June and July unpaid: owing (no failed payment: not
     card_failed).
A05  joins 12 January, cancels in the last second of February (28 days): January new, February cancelled.
     The payment of 1 March stands before the return: after_exit. "paid" and "rejoined" share one instant
     on 31 March; "rejoined" is named earlier in the rules, so the payment comes after the return and is
     used, although it is the earlier record. March is the first month of the second stay: new. Then
     paying.
A06  is first seen paying on 3 January without "joined", inside the warm-up: unknown history. January and
     February are labelled, not counted; March starts as unknown, paying. June: payment failed, May paid:
     owing. July: June and July unpaid, something paid by the end of May, latest is payment_failed:
     card_failed.
A07  joins on 15 March and never pays. March: the stay did not begin by the end of January: not
     card_failed; new. April: nothing paid, the stay began by the end of March: owing. May: nothing paid
     in April and May, the stay began by the end of March, latest is payment_failed: card_failed. The
     payment in June is no return event here (returns = rejoined): after_exit.
A08  joins and cancels within May: memo joined_and_left. Rejoins and cancels within July: memo
     returned_and_left. No label counts, no move.
A09  unknown history; cancels on 14 February inside the warm-up: at March there is nobody to start.
     Rejoins in the last minute of April: an ordinary return from cancelled, new. May: nothing paid in
     May, the stay began by the end of April: owing; the January payment still counts for windows, but the
     memory of the latest event starts with the return, so nothing has failed. June: failed, nothing paid
     in May and June: card_failed.
A10  "joined", "payment_failed" and "paid" share one instant; no matter. In May "resumed" and "paused"
     share one instant and "paused" is the later record; the rules name "paused" before "resumed", so
     resumed is the latest: not paused; paid: paying. In June "rejoined" and "cancelled" share one
     instant; the rules name "cancelled" first, so rejoined is the latest: no exit. July unpaid: owing.
A11  joins in the last second of July: new in July, the last complete month. One row in the incomplete
     August, one after the day the extract can be trusted.
A12  the pause of December 2024 is before the log: set aside, so nothing is known of it. First seen on 11
     February: unknown. February: nothing paid, but the stay (as seen) began in February: not owing:
     paying, not counted. March: the stay began by the end of February: owing, the start of unknown
     history. April paid, May paid but paused on the 31st: paused to July.
A13  is first seen in March, after the warm-up, without "joined": a true joiner. The second identical row
     of 1 April carries a clock time: a duplicate. Cancels on 1 May.
A14  is only seen in a row whose date cannot be read.

Moves: 4 + 4 + 9 + 10 + 8 + 7 = 42 from January to June. Rows at period ends: 42 that move on, 7 live or
paused in July, 6 exits = 55; arrivals 42 and starts 13 = 55.
Rows read: 9 + 7 + 10 + 8 + 10 + 7 + 5 + 6 + 4 + 9 + 3 + 5 + 4 of A01 .. A13 = 87, and 5 rejected = 92.
Used 8 + 7 + 5 + 8 + 9 + 7 + 4 + 6 + 4 + 9 + 1 + 4 + 3 = 75.
"""

from __future__ import annotations

import pytest

import cohortflow as cf
from tests.hand import compare
from tests.oracle import tell

FOLDER = "bread_round"


@pytest.fixture(scope="module")
def study():
    return cf.read_study(compare.HERE / FOLDER / "study.toml")


def test_oracle_labels_accounts_and_counts_as_written(study):
    told = tell(study, compare.rows_of(FOLDER, "extract.csv"))
    assert set(told.labels) == compare.labels(FOLDER, study.calendar)
    assert told.accounting() == compare.counts(FOLDER, "accounting.csv")
    compare.check_tables(FOLDER, told.tables(), study)


def test_history_room_accounts_and_counts_as_written(study):
    history = cf.read(study)
    assert compare.accounting(history.check.to_frame()) == compare.counts(FOLDER, "accounting.csv")
    tally = cf.count(history)
    tally.check_conservation()
    compare.check_tables(FOLDER, tally.tables, study)
    compare.check_printed_rollforward(FOLDER, tally)


def test_noise_after_the_cancellation_is_listed_row_by_row(study):
    """A03 is records 22 to 31 of the extract; the four noise rows are 27, 28, 29 and 31 (30 is ignored)."""
    told = tell(study, compare.rows_of(FOLDER, "extract.csv"))
    after = [n for n, outcome in told.outcomes.items() if outcome == ("set_aside", "after_exit")]
    assert sorted(set(after) & set(range(22, 32))) == [27, 28, 29, 31]
