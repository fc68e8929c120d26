"""Every defect that extracts come with: a file through `check`, against its whole expected accounting."""

from __future__ import annotations

import pytest

import cohortflow as cf
from cohortflow.errors import InputError, NotIdentified

RULES = [{"name": "left", "role": "exit", "when": {"last_event": ["stop"]}}, {"name": "on"}]
OPTIONS = {"as_of": "2026-03-31", "log_start": "2026-01-01", "joins": ["join"], "returns": ["back"]}
HEADER = "customer,time,event\n"
GOOD = "".join(f"m{i},2026-01-{i + 1:02d} 09:00,join\n" for i in range(25)) + "m0,2026-02-10 09:00,stop\n"


def outcomes(tmp_path, text, *, name="log.csv", encoding="utf-8", **options):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
    given = {**OPTIONS, **options}
    history = cf.read_events(path, given.pop("rules", RULES), **given)
    frame = history.check.to_frame()
    frame = frame[frame["file"] == "all"]
    found = zip(frame["outcome"], frame["reason"], frame["rows"], strict=True)
    return history, {f"{o}/{r}" if r else o: int(n) for o, r, n in found}


def refused(tmp_path, text, match, *, kind=InputError, **options):
    with pytest.raises(kind, match=match):
        outcomes(tmp_path, text, **options)


ROWS = {
    "an id is blank": (",2026-01-05 10:00,join\n", "rejected/id_missing"),
    "an id is a blank": ("  ,2026-01-05 10:00,join\n", "rejected/id_missing"),
    "an id is a placeholder": ("Unknown,2026-01-05 10:00,join\n", "rejected/id_missing"),
    "a day that does not exist": ("x,2026-02-30 10:00,join\n", "rejected/time_unreadable"),
    "no date": ("x,tomorrow,join\n", "rejected/time_unreadable"),
    "a tail after the clock": ("x,2026-01-05 10:00 foo,join\n", "rejected/time_unreadable"),
    "no time": ("x,,join\n", "rejected/time_unreadable"),
    "too few fields": ("x,2026-01-05 10:00\n", "rejected/ragged_row"),
    "too many fields": ("x,2026-01-05 10:00,join,more\n", "rejected/ragged_row"),
    "after the as-of day": ("m1,2026-04-01 00:00,join\n", "set_aside/after_as_of"),
    "before the log's start": ("m1,2025-12-31 23:59,join\n", "set_aside/before_log_start"),
    "after an exit": ("m0,2026-03-02 10:00,join\n", "set_aside/after_exit"),
    "the same row twice": ("m0,2026-02-10 09:00,stop\n", "duplicate/identical"),
}


@pytest.mark.parametrize("case", ROWS)
def test_one_row_that_is_not_used(tmp_path, case):
    row, outcome = ROWS[case]
    history, found = outcomes(tmp_path, HEADER + GOOD + row)
    assert found == {"read": 27, "used": 26, outcome: 1}
    if not outcome.startswith("set_aside") or "exit" in outcome:
        assert history.rejected["line"].tolist() == [28]  # the header is line 1, the good rows are 2 .. 27
        assert history.rejected["reason"].tolist() == [outcome.split("/")[1]]


IDS = ["NA", "null", "None", "1E5", "100000", "00123", "123", "12345678901234567890", "12345678901234567891"]


def test_ids_are_text_and_never_merged(tmp_path):
    rows = "".join(f"{name},2026-01-05 10:00,join\n" for name in IDS)
    history, found = outcomes(tmp_path, HEADER + GOOD + rows)
    assert found == {"read": 35, "used": 35}
    assert history.tally.meta.customers == 25 + len(IDS)


SPELLINGS = {
    "utf-8": {},
    "utf-8-sig": {},
    "utf-16": {},
    "utf-16-le": {},
    "cp1252": {},
}


@pytest.mark.parametrize("encoding", SPELLINGS)
def test_encodings(tmp_path, encoding):
    rows = HEADER + GOOD + "Müller,2026-01-05 10:00,join\nMüller,2026-02-05 10:00,stop\n"
    _, found = outcomes(tmp_path, rows, encoding=encoding)
    assert found == {"read": 28, "used": 28}


@pytest.mark.parametrize("mark", [";", "\t", "|"])
def test_delimiters(tmp_path, mark):
    _, found = outcomes(tmp_path, (HEADER + GOOD).replace(",", mark))
    assert found == {"read": 26, "used": 26}


def test_decimal_commas(tmp_path):
    text = (HEADER.strip() + ",sum\n" + GOOD.replace("\n", ",1.234,50\n")).replace(",", ";")
    text = text.replace("1.234;50", "1.234,50")
    history, found = outcomes(tmp_path, text, amount="sum")
    assert found == {"read": 26, "used": 26}
    amounts = history.tally.table("amounts")
    assert amounts["total"].sum() == 26 * 123_450  # cents


def test_unreadable_amounts_are_rejected_and_negative_ones_are_credits(tmp_path):
    text = HEADER.strip() + ",sum\n" + GOOD.replace("\n", ",2.00\n")
    text += "m1,2026-01-20 10:00,join,-0.50\nm1,2026-01-21 10:00,join,a lot\n"
    history, found = outcomes(tmp_path, text, amount="sum")
    assert found == {"read": 28, "used": 27, "rejected/amount_unreadable": 1}
    assert history.tally.table("amounts")["total"].sum() == 26 * 200 - 50


def test_line_breaks_inside_quotes_do_not_shift_line_numbers(tmp_path):
    text = "customer,time,event,note\n" + GOOD.replace("\n", ",x\n")
    text += 'm1,2026-01-20 10:00,join,"two\nlines"\n\nm2,never,join,x\n'
    history, found = outcomes(tmp_path, text)
    assert found == {"read": 28, "used": 27, "rejected/time_unreadable": 1}
    assert history.rejected["line"].tolist() == [31]  # 28 and 29 hold one record, 30 is blank


def test_superseded_versions_of_a_row(tmp_path):
    text = "customer,time,event,id,loaded\n" + "".join(
        line + f",{i},2026-03-01\n" for i, line in enumerate(GOOD.splitlines())
    )
    text += "m1,2026-01-02 12:00,join,1,2026-02-01\nm2,2026-01-03 12:00,join,2,2026-03-02\n"
    history, found = outcomes(tmp_path, text, event_id="id", loaded_at="loaded")
    assert found == {"read": 28, "used": 26, "duplicate/superseded": 2}
    assert history.rejected["line"].tolist() == [4, 28]  # the older of each pair
    assert history.check.finding("superseded_rows").rows == 2


def test_equal_rows_without_a_clock_are_kept_and_counted(tmp_path):
    text = HEADER + GOOD.replace(" 09:00", "") + "m1,2026-01-02,join\n"
    history, found = outcomes(tmp_path, text)
    assert found == {"read": 27, "used": 27}
    assert history.check.finding("identical_rows_kept").rows == 1


def test_offsets_and_the_edges_of_summer_time(tmp_path):
    options = {"as_of": "2026-04-30", "timezone": "Europe/London"}
    text = HEADER + GOOD.replace(" 09:00,", "T09:00:00Z,")
    text += "x,2026-03-31T22:59:59Z,join\ny,2026-03-31T23:00:00Z,join\nz,2026-03-31T20:00:00-03:00,join\n"
    history, found = outcomes(tmp_path, text, **options)
    assert found == {"read": 29, "used": 29}
    joined = history.tally.joiners("joined")[1].sum(axis=1)
    assert joined.tolist() == [25, 0, 1, 2]  # 23:00 UTC is already April in London; so is 20:00 at -03:00


def test_unknown_events_are_refused_with_the_nearest_name(tmp_path):
    refused(
        tmp_path, HEADER + GOOD + "x,2026-01-05 10:00,jion\n", r'"jion" 1 times \(did you mean "join"\?\)'
    )


def test_unknown_events_can_be_rejected_or_set_aside(tmp_path):
    for others, outcome in (("reject", "rejected/unknown_event"), ("ignore", "set_aside/unknown_event")):
        _, found = outcomes(
            tmp_path,
            HEADER + GOOD + "x,2026-01-05 10:00,jion\n",
            events={"others": others, "ignore": ["news"]},
        )
        assert found == {"read": 27, "used": 26, outcome: 1}


REFUSED = {
    "day and month cannot be told": (
        HEADER + "".join(f"m{i},0{i}/0{i + 1}/2026,join\n" for i in range(1, 9)),
        r'cannot tell day from month.*date_format = "%d/%m/%Y"',
    ),
    "a column is missing": (HEADER.replace("event", "evnt") + GOOD, 'no column "event".*did you mean "evnt"'),
    "a column stands twice": ("customer,time,event,event\n" + GOOD.replace("\n", ",x\n"), "more than once"),
    "nothing in it": (b"", "the file is empty"),
    "no rows": (HEADER, "no rows under the header line"),
    "no delimiter": ("just words\nand more\n", "cannot tell what separates the columns"),
    "not text": (b"\x7fELF\x00\x01\x02\x03" + bytes(range(1, 200)) * 3, "this is not a text file"),
    "offsets without a zone": (HEADER + GOOD.replace(" 09:00", "T09:00:00Z"), "Set timezone"),
    "too many blank ids": (HEADER + GOOD + ",2026-01-05 10:00,join\n" * 3, "at most 5 % are tolerated"),
    "an open quotation mark": (
        HEADER + GOOD + '"x,2026-01-05 10:00,join\n' + GOOD,
        "quotation mark is opened",
    ),
}


@pytest.mark.parametrize("case", REFUSED)
def test_what_cannot_be_read_is_refused(tmp_path, case):
    text, match = REFUSED[case]
    refused(tmp_path, text, match)


def test_an_extract_of_survivors_is_refused(tmp_path):
    text = HEADER + GOOD.replace("stop", "join")
    refused(tmp_path, text, "No customer ever reached an exit", kind=NotIdentified)


def test_a_missing_file_names_the_nearest(tmp_path):
    (tmp_path / "events-2026.csv").write_text(HEADER + GOOD)
    with pytest.raises(InputError, match=r'No file matches .*did you mean "events-2026.csv"'):
        cf.read_events(tmp_path / "event-2026.csv", RULES, **OPTIONS)
