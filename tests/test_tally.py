"""The Tally: adding, cutting, conserving; every small table here can be counted on paper."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.errors import CallError, DefinitionsDiffer, InputError, NotIdentified
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import ENDS, KINDS, Meta, Tally
from cohortflow.tally_cuts import cut_path

STATES = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
MOVED, AS_OF, EXIT, UNSEEN = range(len(ENDS))


def meta(**changes) -> Meta:
    plain = Meta(STATES, Calendar("step"), first=1, last=3, customers=3, definitions="d", bucket_bits=8,
                 segment_columns=(("channel", "segment"),), segments=(("stall",), ("web",)))
    return replace(plain, **changes)


def tally_of(paths: list[tuple[int, int, list[int]]], **changes) -> Tally:
    """(bucket, segment, states in periods 1, 2, ...) for each customer, counted the long way round."""
    moves, starts = [], []
    for bucket, segment, path in paths:
        starts.append((bucket, segment, 1, path[0], 0, -1, 1, 1))
        for period, state in enumerate(path, start=1):
            last = period == len(path)
            end = EXIT if state == 2 else AS_OF if last else MOVED
            following = -1 if last else path[period]
            moves.append((bucket, segment, period, 0 if last else 1, end, state, following, 1, 1))
    columns = ["bucket", "segment", "period", "gap", "end", "state", "next_state", "n", "weight"]
    start_columns = ["bucket", "segment", "period", "state", "kind", "from_state", "n", "weight"]
    tables = {"moves": pd.DataFrame(moves, columns=columns), "starts": pd.DataFrame(starts, columns=start_columns)}
    return Tally.build(meta(customers=len(paths), **changes), tables)


THREE = [(7, 0, [0, 1, 1]), (9, 1, [0, 1, 2]), (200, 0, [0, 2])]


def test_counts_mix_and_joiners_of_three_customers():
    tally = tally_of(THREE)
    # fresh -> steady twice, fresh -> left once; steady -> steady once, steady -> left once
    assert tally.counts().tolist() == [[0, 2, 1], [0, 1, 1], [0, 0, 0]]
    assert tally.mix(1).tolist() == [3, 0, 0] and tally.mix("2").tolist() == [0, 2, 0]
    assert tally.mix().tolist() == [0, 1, 0]
    periods, joined = tally.joiners()
    assert periods.tolist() == [1, 2, 3] and joined.tolist() == [[3, 0, 0], [0, 0, 0], [0, 0, 0]]
    assert tally.origins() == [1, 2]
    by_period = tally.counts_by_period()[1]
    assert by_period[0].tolist() == [[0, 2, 1], [0, 0, 0], [0, 0, 0]]
    assert tally.counts_by_bucket().sum(axis=0).tolist() == tally.counts().tolist()
    assert tally.headline() == "tally of 3 customers, 1 to 3, 5 moves"
    assert tally.to_frame().query("segment == 'web'")["n"].tolist() == [1, 1]


def test_segments_add_up_to_the_whole():
    tally = tally_of(THREE)
    parts = tally.by_segment("channel")
    assert list(parts) == ["stall", "web"] and parts["stall"].meta.customers == 2
    assert (parts["web"].counts() + parts["stall"].counts()).tolist() == tally.counts().tolist()


paths_drawn = st.lists(
    st.tuples(st.integers(0, 255), st.integers(0, 1),
              st.sampled_from([[0, 1, 1], [0, 1, 2], [0, 2], [1, 1, 1], [1, 0, 2], [2]])),
    min_size=1, max_size=12,
)  # fmt: skip


@settings(max_examples=25, deadline=None)
@given(paths_drawn, paths_drawn)
def test_adding_two_tallies_is_counting_their_customers_together(one, two):
    both = tally_of(one) + tally_of(two)
    together = tally_of(one + two)
    for name, table in together.tables.items():
        pd.testing.assert_frame_equal(both.tables[name], table)
    both.check_conservation()


def test_adding_folds_to_the_coarser_buckets():
    fine, coarse = tally_of(THREE), tally_of([(1, 0, [0, 1, 1])], bucket_bits=2)
    both = fine + coarse
    # 7, 9, 200 in 8 bits are 0, 0, 3 in the leading 2 bits
    assert sorted(set(both.tables["moves"]["bucket"])) == [0, 1, 3]
    assert both.meta.bucket_bits == 2


def test_at_origin_forgets_what_came_later():
    back = tally_of(THREE).at_origin(2)
    assert back.counts().tolist() == [[0, 2, 1], [0, 0, 0], [0, 0, 0]]
    assert back.mix().tolist() == [0, 2, 0] and back.meta.last == 2
    assert set(back.tables["moves"].query("period == 2 and state == 1")["end"]) == {AS_OF}
    with pytest.raises(NotIdentified, match='do not hold the table "spells"'):
        back.table("spells")
    back.check_conservation()


def test_between_keeps_origins_of_the_window_only():
    tally = tally_of(THREE)
    assert tally.between(2).counts().tolist() == [[0, 0, 0], [0, 1, 1], [0, 0, 0]]
    assert tally.between(exclude=[2]).counts().tolist() == [[0, 2, 1], [0, 0, 0], [0, 0, 0]]


def test_conservation_names_the_first_cell_that_is_off():
    tally = tally_of(THREE)
    broken = tally.tables["moves"].copy()
    broken.loc[(broken["period"] == 2) & (broken["state"] == 1), "n"] += 1
    with pytest.raises(InputError, match='in period 2, state "steady", rows and arrivals differ by 1'):
        Tally.build(tally.meta, {**tally.tables, "moves": broken}).check_conservation()


def test_refusals_say_what_came_and_what_is_known():
    tally = tally_of(THREE)
    with pytest.raises(CallError, match='no table "mooves" .did you mean "moves"'):
        tally.table("mooves")
    with pytest.raises(CallError, match='Period "9" is outside the counted window, 1 to 3'):
        tally.period("9")
    with pytest.raises(CallError, match='no segment "chanel" .did you mean "channel"'):
        tally.by_segment("chanel")
    with pytest.raises(CallError, match=f'Unknown kind "new".*{KINDS[0]}'):
        tally.joiners("new")
    with pytest.raises(DefinitionsDiffer, match="definitions differs: d and e"):
        tally + tally_of(THREE, definitions="e")


def test_paths_are_thinned_to_the_lowest_level_that_fits(monkeypatch):
    monkeypatch.setattr("cohortflow.tally.PATHS_SAMPLED", 5)
    paths = pd.DataFrame({"segment": 0, "level": [0, 1, 2], "path": ["1 0*1", "1 1*2", "1 0*3"], "n": [3, 2, 1]})
    one = Tally.build(meta(), {"paths": paths})
    both = one + Tally.build(meta(), {"paths": paths})
    # twelve customers: level >= 0 holds 12, level >= 1 holds 6, level >= 2 holds 2, which is the first <= 5
    assert both.meta.sample_level == 2 and both.tables["paths"]["n"].tolist() == [2]


@given(st.lists(st.tuples(st.sampled_from(["0", "1", "-"]), st.integers(1, 4)), min_size=1, max_size=5),
       st.integers(-1, 25))
def test_a_cut_path_is_the_beginning_of_the_path(runs, length):
    def unrolled(path: str) -> str:
        return "".join(s * int(n) for s, n in (run.split("*") for run in path.split(" ")[1:]))

    path = " ".join(["10", "1*1", *(f"{s}*{n}" for s, n in runs)])
    whole, cut = unrolled(path), cut_path(path, 10 + length)
    assert unrolled(cut) == whole[: length + 1].rstrip("-") if cut else length < 0


def test_weights_are_scaled_integers():
    rows = pd.DataFrame([(0, 0, 1, 1, 0, 0, 1, 2, 2_500_000)],
                        columns=["bucket", "segment", "period", "gap", "end", "state", "next_state", "n", "weight"])
    tally = Tally.build(meta(weighted=True, weight_scale=1_000_000), {"moves": rows})
    assert tally.counts()[0, 1] == 2 and tally.counts(weighted=True)[0, 1] == 2.5
    assert tally.mix(1, weighted=True)["fresh"] == 2.5
    assert np.array_equal(tally.counts_by_bucket(weighted=True)[0], tally.counts(weighted=True))
