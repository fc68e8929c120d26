"""A shop where leaving is only silence (twelve months) and purchases of one day carry no clock time.

The rules, first match wins: gone (no purchase in twelve months, and one, or the first sight, before
them); drifting (the same with three months); frequent (three or more purchases in three months); generous
(100.00 or more spent in three months); browsing (an enquiry this month); occasional (everybody else).

The window. The log starts in January 2023; the largest k is 12 and no joins are named, so the warm-up is
twice 12 = 24 months: everybody first seen before January 2025 is of unknown history and counts from
January 2025 on; whoever is first seen from January 2025 on is a true joiner. 30 June 2026 is the last day
of June: June is complete. Leaving is by silence, so the return event is the `of` event of that rule: a
purchase.

Customer by customer:
B01  buys in January and June 2023. Silent since June 2023: twelve silent months are July 2023 to June
     2024: gone in June 2024, inside the warm-up, and never back: nothing counts.
B02  buys in March 2023 and March 2024. In February 2024 the twelve months March 2023 .. February 2024
     hold a purchase: not gone. January and February 2025: drifting (start of unknown history); March
     2025: the months April 2024 .. March 2025 are silent: gone.
B03  buys in February 2023, gone in February 2024. The enquiry of May 2024 is no purchase: after_exit. Two
     identical rows on 10 April 2025: a day without a clock time, so both are kept and count: the return,
     2 purchases and 24.00 in three months: occasional. May: three purchases: frequent. June: April ..
     June still hold three: frequent. July: May .. July hold one: occasional. August: June .. August
     silent: drifting, to April 2026; gone in May 2026 (June 2025 .. May 2026 silent).
B04  buys in November 2024: unknown history, in January 2025 occasional (the 31st is the last day). Three
     rows on 3 March 2025, two of them identical and kept: January .. March hold four purchases: frequent
     comes before generous (130.00). April and May: three purchases: frequent. June: April .. June silent:
     drifting, to November. 150.00 on 31 December: generous in December, January, February. March 2026:
     drifting.
B05  first seen on 15 January 2025, the first month after the warm-up: joined. 99.99 is below 100:
     occasional. February: 99.99 + 0.01 = 100.00: generous, and in March too. April: 0.01: occasional. May
     2025 to January 2026 drifting; February 2026 (March 2025 .. February 2026 silent): gone. Buys on 1
     March 2026: returned, occasional; April, May; June: drifting.
B06  first and last purchase on 31 August 2025: joined in August; occasional to October; drifting from
     November.
B07  asks once, on 10 February 2025, and never buys: no `of` event ever. February: browsing; March, April:
     the stay had not begun three months before: occasional. May: February is the month before March ..
     May: drifting. Gone in February 2026, twelve months after the month of joining. The enquiry of March
     2026 is no purchase: after_exit.
B08  first buys on the last day, 30 June 2026: joined. 2 July is after the last day the extract can be
     trusted.
B09  asks and buys on 10 October 2025: no rule before browsing holds: browsing. November, December:
     occasional. January 2026: November .. January silent: drifting. The enquiry in February changes
     nothing: drifting comes before browsing.
B10  buys in January 2023, gone in January 2024, back in June 2024: all inside the warm-up. In January
     2025 drifting: a start of unknown history. Gone in June 2025.
B11  buys on 29 February 2024; gone in February 2025; buys on 1 March 2025: returned.
B12  the purchase of 31 December 2022 is before the log. Buys on 1 March 2024 and 31 March 2025: more than
     twelve months by the calendar, but at no month's end are twelve whole months silent (February 2025:
     March 2024 is inside): never gone before March 2026.
Rejected: the id "-1"; the 13th month. "Gift" is named nowhere and others = "ignore": set aside.

Rows at period ends that count: B02 3, B03 14, B04 18, B05 14 + 4, B06 11, B07 13, B08 1, B09 9, B10 6,
B11 2 + 13, B12 15 = 123 = 110 moves + 8 exits + 5 still there in June 2026; and 110 arrivals + 13 starts
= 123.
Rows read: 33 of B01 .. B12 and 3 others = 36; used 2 + 2 + 4 + 6 + 3 + 1 + 1 + 1 + 3 + 2 + 2 + 2 = 29.
"""

from __future__ import annotations

import pytest

import cohortflow as cf
from tests.hand import compare
from tests.oracle import tell

FOLDER = "seed_shop"


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
