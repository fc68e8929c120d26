"""Findings that come of the numbers noted while customers were labelled."""

from __future__ import annotations

from collections import Counter

from cohortflow.history.reading import Reading
from cohortflow.history.tabulate import Tabulator

BUSY_SHARE, BUSY_ROWS = 0.001, 1000


def note_findings(reading: Reading, notes: Counter[str], tabulator: Tabulator) -> None:
    """Turn what was noted into findings of the reading."""
    if notes["identical_rows_kept"]:
        reading.found("identical_rows_kept", rows=notes["identical_rows_kept"])
    if notes["two_states_in_a_period"]:
        reading.found("two_states_in_a_period", rows=notes["two_states_in_a_period"])
    if notes["overlapping_spells"]:
        reading.found("overlapping_spells", rows=notes["overlapping_spells"])
    if notes["ties_decided_by_order"]:
        reading.found("ties_decided_by_order", rows=notes["ties_decided_by_order"], serious=False)
    if notes["joined_without_join_event"]:
        reading.found("joined_without_join_event", customers=notes["joined_without_join_event"])
    if notes["segment_changes"]:
        reading.found("segment_changes", customers=notes["segment_changes"], serious=False)
    if notes["busiest"] >= max(BUSY_ROWS, BUSY_SHARE * reading.loaded.rows):
        reading.found("busy_customer", rows=notes["busiest"], share=notes["busiest"] / reading.loaded.rows)
    _impossible_moves(reading, tabulator)


def _impossible_moves(reading: Reading, tabulator: Tabulator) -> None:
    names, label = reading.study.states.names, reading.study.calendar.label
    by_move: Counter[tuple[int, int]] = Counter()
    for (_, origin, target), n in tabulator.impossible.items():
        by_move[origin, target] += n
    for (origin, target), n in sorted(by_move.items()):
        periods = sorted(p for p, i, j in tabulator.impossible if (i, j) == (origin, target))
        reading.found(
            "impossible_move",
            customers=n,
            state=names[origin],
            to=names[target],
            first_period=label(periods[0]),
        )
