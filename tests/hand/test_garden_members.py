"""An annual membership with a paid-up-to date, a grace quarter (away), early renewals and multi-year
members.

The rules, first match wins: resigned (the latest of joined, renewed, resigned is resigned); lapsed (a
whole quarter has passed since the paid-up-to date); in_grace (the date has passed); first_year (fewer
than 4 quarters since the quarter of joining); renewal_due (the date falls in the next quarter); settled
(everybody else).
A date on the last day of a quarter has passed at the end of that quarter; it is then in grace, and lapsed
a quarter later.

The window. The log starts on 10 February 2023, in mid-quarter: the first complete quarter is 2023-Q2. The
largest k is 4 (tenure_below) and joins are named, so the warm-up is 2023-Q2 .. 2024-Q1 and unknown
histories count from 2024-Q2 on. The extract can be trusted to 10 October 2025: the last complete quarter
is 2025-Q3.

Customer by customer:
C01  joins 5 April 2023 to 4 April 2024; renews early, on 20 March 2024, to 4 April 2025, so 2024-Q1 is
     still first_year (tenure 3) and 2024-Q2 settled, never in grace. 2025-Q1: the date is in the next
     quarter: renewal_due. Renews 2 April 2025: settled.
C02  joins 31 May 2023 to 30 May 2024 and does not renew: four quarters first_year, in_grace in 2024-Q2,
     lapsed in 2024-Q3.
C03  joins on the last day of the quarter, 30 June 2023, to 30 June 2024: 2024-Q2 in grace. Renews on 10
     July 2024 to 30 June 2025: settled, settled, renewal_due (2025-Q1), in_grace (2025-Q2), lapsed
     (2025-Q3).
C04  joins 15 July 2023 for three years: first_year to 2024-Q2, then settled; the date is far away. Its
     second row has the same row_id and the same cells: a duplicate, although the date carries no clock
     time.
C05  renews on 1 March 2023, in the incomplete first quarter of the log: unknown. To 29 February 2024:
     settled, settled, settled, renewal_due (2023-Q4), in_grace (2024-Q1): labelled, not counted. Renews
     15 April 2024 to 28 February 2025: settled at 2024-Q2, the start of unknown history; settled;
     renewal_due; in_grace (2025-Q1). Resigns 5 May 2025: resigned (that rule comes before lapsed). Joins
     again 9 September 2025: returned, first_year.
C06  joins 10 January 2024; resigns 2 May and joins again on 20 June: within one quarter, so no exit and
     no new stay: first_year with tenure 1, 2, 3; 2025-Q1: tenure 4, the date (19 June 2025) is in the
     next quarter: renewal_due; 2025-Q2 in_grace; renews 1 July 2025: settled.
C07  joined and resigned on one day, resigned being the later record. tie_order puts resigned before
     joined, so joined is the latest: no exit. first_year for four quarters; 2025-Q3: the date, 7 August
     2025, has passed: in_grace.
C08  joins 1 August 2023 to 31 July 2024; in_grace 2024-Q3; lapsed 2024-Q4. Renews on 3 February 2025,
     which is a return event here: a new stay, first_year from tenure 0.
C09  joins 1 October 2024 without any paid-up-to date: no date has ever passed: first_year to tenure 3.
C10  joins 5 January 2025 and resigns 10 February: memo joined_and_left. It resigns again in June:
     after_exit.
C11  is first seen resigning, without a join, inside the warm-up: unknown, and gone; no memo, no start.
     Renews 11 November 2024: returned from resigned, first_year.
C12  joined before the log: set aside. First seen on 10 January 2024: unknown; 2024-Q1 labelled, not
     counted; settled at 2024-Q2. In 2024-Q4 the renewal would be due, but it renews on the last day of
     that quarter for two years: settled. One row in the incomplete quarter, one after the day the extract
     can be trusted.
Rejected: the 0th month; the id "unknown".

Rows at period ends: 63 moves + 4 exits + 9 still there in 2025-Q3 = 76; 63 arrivals + 13 starts = 76.
Rows read: 31 of C01 .. C12 (with the duplicate), 2 others = 33; used 3+1+2+1+4+4+2+2+1+2+2+2 = 26.
"""

from __future__ import annotations

import pytest

import cohortflow as cf
from tests.hand import compare
from tests.oracle import tell

FOLDER = "garden_members"


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
