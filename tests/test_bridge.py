"""The bridge between two forecasts: worked by hand, and its laws."""

from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.errors import InputError, NotIdentified
from cohortflow.runs.bridge import PARTS, Bridge, bridge, shapley
from cohortflow.study.parts import Adjustment, JoinerSpec, ModelSpec, ValueSpec
from tests.comparison_cases import PLAIN, opened, tally

# Ten customers in period 0. Two leave in period 1; of the eight left, four leave in period 2.
TEN = {"hg": 2, "hhg": 4, "hhh": 4}


def part(made: Bridge, name: str, *, quantity: str = "all_live", period: str = "3") -> float:
    frame = made.frame
    (value,) = frame.loc[
        (frame["quantity"] == quantity) & (frame["period"] == period) & (frame["part"] == name), "amount"
    ]
    return float(value)


def gaps(made: Bridge) -> np.ndarray:
    """this forecast - last forecast - all parts, of every quantity and period."""
    wide = made.frame.pivot(index=["quantity", "period"], columns="part", values="amount")
    parts = [name for name in PARTS if name in wide]
    return (wide["this_forecast"] - wide["last_forecast"] - wide[parts].sum(axis=1)).to_numpy()


def test_two_states_by_hand():
    # The last forecast, made at the end of period 1: 8 customers, of whom 2 in 10 leave each period, so
    # 8, 6.4, 5.12 at the ends of periods 1, 2, 3. This one, at the end of period 2: 4 customers, and
    # (2 + 4) of (10 + 8) leave, a third, so 4 x 2/3 = 8/3 at the end of period 3.
    # Opening first, rates second: 6.4 -> 4 at 0.8 kept is -1.92, then 0.8 -> 2/3 of 4 is -0.5333.
    # Rates first, opening second: 0.8 -> 2/3 of 6.4 is -0.8533, then 6.4 -> 4 at 2/3 kept is -1.6.
    # Means: opening (-1.92 - 1.6) / 2 = -1.76; rates (-0.5333 - 0.8533) / 2 = -0.6933; sum 8/3 - 5.12.
    made = bridge(opened(tally(TEN, last=1)), opened(tally(TEN, last=2)))
    assert part(made, "last_forecast") == pytest.approx(5.12, abs=1e-12)
    assert part(made, "this_forecast") == pytest.approx(8 / 3, abs=1e-12)
    assert part(made, "opening_mix") == pytest.approx(-1.76, abs=1e-12)
    assert part(made, "rates") == pytest.approx(-0.52 * 4 / 3, abs=1e-12)  # 0.69333...
    others = [part(made, name) for name in PARTS if name not in ("opening_mix", "rates")]
    assert others == [0.0] * 6
    # the only move that changed is leaving: it carries the whole part of the rates
    moves = made.details[(made.details["part"] == "rates") & (made.details["quantity"] == "all_live")]
    last = moves[moves["period"] == "3"]
    assert last[["from", "to"]].values.tolist() == [["here", "gone"]]
    assert last["amount"].iloc[0] == pytest.approx(-0.52 * 4 / 3, abs=1e-12)


def test_the_period_of_the_new_opening_differs_by_who_is_there_alone():
    # 4 counted at the end of period 2 against 6.4 expected
    made = bridge(opened(tally(TEN, last=1)), opened(tally(TEN, last=2)))
    assert part(made, "opening_mix", period="2") == pytest.approx(-2.4, abs=1e-12)
    assert part(made, "rates", period="2") == 0.0


def test_corrected_counts_are_data_restated():
    # A late report: of the two leavers of period 1 one had stayed and left in period 2 only. On today's counts
    # the last forecast would have been 9 customers, 1 in 10 leaving: 9 x 0.9 x 0.9 = 7.29 instead of 5.12.
    late = {"hg": 1, "hhg": 5, "hhh": 4}
    made = bridge(opened(tally(TEN, last=1)), opened(tally(late, last=2)))
    assert part(made, "data_restated") == pytest.approx(7.29 - 5.12, abs=1e-12)
    # now 4 customers and (1 + 5) / (10 + 9) leaving; the opening by itself -4.1 x (0.9 + 13/19) / 2
    assert part(made, "this_forecast") == pytest.approx(4 * 13 / 19, abs=1e-12)
    assert part(made, "opening_mix") == pytest.approx(-4.1 * (0.9 + 13 / 19) / 2, abs=1e-12)


def test_a_change_of_mix_with_constant_rates_is_segment_mix():
    # south: 10 of 100 leave, then 9 of 90; north: 10 of 20, then 50 of 100 after 90 have joined in period 1.
    # Each segment's rate stays (0.1 and 0.5), the pooled one goes from 20/120 to 79/310.
    paths = {"hg@south": 10, "hhg@south": 9, "hhh@south": 81, "hg@north": 10, "hhg@north": 5, "hhh@north": 5,
             "1.hg@north": 45, "1.hh@north": 45}  # fmt: skip
    made = bridge(opened(tally(paths, last=1)), opened(tally(paths, last=2)))
    assert part(made, "rates") == pytest.approx(0.0, abs=1e-12)
    # 190 x 5/6 = 158.33 were expected at the end of period 2, 131 are counted
    kept_old, kept_new = 1 - 20 / 120, 1 - 79 / 310
    expected, counted = 190 * kept_old, 131
    assert part(made, "segment_mix") == pytest.approx(
        (kept_new - kept_old) * (expected + counted) / 2, abs=1e-9
    )
    assert part(made, "opening_mix") == pytest.approx(
        (counted - expected) * (kept_old + kept_new) / 2, abs=1e-9
    )


def test_without_segments_their_mix_stands_in_the_rates_and_is_said():
    study = replace(PLAIN, model=ModelSpec("tenure", bands=(1,)))
    long = {"hhhhhg": 3, "hhhhhh": 5, "hg": 2, "1.hhhhh": 3, "2.hhg": 2}
    made = bridge(opened(tally(long, last=4), study), opened(tally(long, last=5), study))
    assert "segment_mix_in_rates" in made.notes and "segment_mix" not in set(made.frame["part"])
    assert np.abs(gaps(made)).max() < 1e-9


def test_joiners_prices_adjustments_and_model_have_parts_of_their_own():
    money = ValueSpec("GBP", {"here": 10.0}, timing="end")
    old = replace(PLAIN, horizon=4, value=money)
    new = replace(
        old, joiners=JoinerSpec("constant"), value=replace(money, per_period={"here": 12.0}),
        adjustments=(Adjustment(4, "here", 3.0, "a fair"),), model=ModelSpec("recent", window=1),
    )  # fmt: skip
    paths = {**TEN, "1.hh": 2, "2.h": 2}
    made = bridge(opened(tally(paths, last=2), old), opened(tally(paths, last=2), new))
    # One base: nobody has been counted since, and no rate is counted later.
    for name in ("data_restated", "opening_mix", "rates"):
        assert part(made, name) == part(made, name, period="5") == 0.0
    # 2 join a period on average (the window's periods 1 and 2). At the end of period 3 they are the joiners' part.
    assert part(made, "joiners") == pytest.approx(2.0, abs=1e-12)
    assert part(made, "adjustments") == 0.0
    # period 4: three added by hand, nobody of them can have moved yet
    assert part(made, "adjustments", period="4") == pytest.approx(3.0, abs=1e-12)
    assert part(made, "value", period="4") == 0.0
    assert part(made, "value", quantity="contribution", period="4") > 0
    assert part(made, "model") != 0.0
    assert np.abs(gaps(made)).max() < 1e-9
    kinds = made.details[made.details["part"] == "joiners"]["kind"].unique().tolist()
    assert kinds == ["joined"]


def test_different_models_with_other_hidden_states_still_add_up():
    long = {"hhhhhhg": 3, "hahhhhh": 5, "hg": 2, "1.hhahhh": 3, "2.hhg": 2, "haag": 4, "3.hhaa": 3, "hahg": 2}
    old, new = replace(PLAIN, horizon=4), replace(PLAIN, horizon=4, model=ModelSpec("tenure", bands=(1,)))
    made = bridge(opened(tally(long, last=4), old), opened(tally(long, last=6), new))
    assert np.abs(gaps(made)).max() < 1e-9 and part(made, "model", period="7") != 0


def test_the_segment_model_separates_the_segments_too():
    paths = {"hhg@south": 9, "hhh@south": 81, "hg@south": 10, "hg@north": 10, "hhg@north": 5, "hhh@north": 5,
             "1.hg@north": 45, "1.hh@north": 45}  # fmt: skip
    study = replace(PLAIN, model=ModelSpec("segment"))
    made = bridge(
        opened(tally(paths, last=1), study, by="town"), opened(tally(paths, last=2), study, by="town")
    )
    assert "segment_mix_in_rates" not in made.notes and np.abs(gaps(made)).max() < 1e-9


def test_what_one_forecast_does_not_know_is_left_out():
    # four are away at the end of period 2 and nobody has left that state: no figure beyond the count itself
    counts = tally({"hhaa": 4, "hhhh": 4, "hg": 1, "hhha": 2}, last=2)
    made = bridge(opened(counts), opened(counts, replace(PLAIN, horizon=1)))
    assert set(made.frame["period"]) == {"2"} and np.isfinite(made.frame["amount"]).all()


def test_forecasts_that_share_no_known_figure_are_refused():
    paths = {"hhaa": 4, "hhhh": 4, "hg": 1, "hhha": 2}
    with pytest.raises(NotIdentified, match="No period of the forecasts has a figure that both know"):
        bridge(opened(tally(paths, last=2)), opened(tally(paths, last=3)))


def test_details_add_up_to_their_part():
    long = {"hhhhhhg": 3, "hahhhhh": 5, "hg": 2, "1.hhahhh": 3, "2.hhg": 2, "haag": 4, "3.hhaa": 3}
    study = replace(PLAIN, horizon=5, joiners=JoinerSpec("constant"))
    made = bridge(opened(tally(long, last=4), study), opened(tally(long, last=6), study))
    whole = made.frame.set_index(["quantity", "period", "part"])["amount"]
    split = made.details.groupby(["quantity", "period", "part"])["amount"].sum()
    assert {p for _, _, p in split.index} == {"opening_mix", "joiners", "rates"}
    assert np.abs(split - whole[split.index]).max() < 1e-9
    rates = made.details[(made.details["part"] == "rates") & (made.details["quantity"] == "all_live")]
    for _, rows in rates.groupby("period"):
        assert (np.diff(rows["amount"].abs()) <= 1e-12).all()  # largest first
    assert not (rates["from"] == "").any()


def test_runs_without_a_common_period_are_refused():
    with pytest.raises(
        InputError, match="have no period in common: the earlier one ends in 3, the later one begins"
    ):
        bridge(opened(tally({"h" * 9: 4, "hg": 1}, last=1)), opened(tally({"h" * 9: 4, "hg": 1}, last=6)))


def test_a_run_that_does_not_come_again_from_its_counts_is_refused():
    good = opened(tally(TEN, last=1), name="q2")
    changed = good.projection.copy()
    changed.loc[changed["periods_ahead"] == 2, "customers"] += 0.01
    with pytest.raises(InputError, match='The run "q2" does not come again from its own counts'):
        bridge(replace(good, projection=changed), opened(tally(TEN, last=2)))


# ---- laws ----
def test_shapley_is_the_mean_over_all_orders():
    # independent: every order played out
    rng = np.random.default_rng(5)
    worth = {frozenset(s): float(v) for s, v in zip(_subsets("abcd"), rng.normal(size=16), strict=True)}
    orders = list(permutations("abcd"))
    mean = {p: np.mean([worth[frozenset(o[: o.index(p) + 1])] - worth[frozenset(o[: o.index(p)])] for o in orders])
            for p in "abcd"}  # fmt: skip
    found = shapley("abcd", lambda s: worth[frozenset(s)])
    assert found == pytest.approx(mean, abs=1e-12)


def _subsets(names: str) -> list[tuple[str, ...]]:
    return [tuple(n for k, n in enumerate(names) if code >> k & 1) for code in range(2 ** len(names))]


@given(st.permutations(["a", "b", "c", "d"]), st.lists(st.floats(-9, 9), min_size=16, max_size=16))
def test_shapley_parts_add_up_and_prefer_no_order(order, values):
    worth = dict(zip(map(frozenset, _subsets("abcd")), values, strict=True))
    found = shapley("abcd", worth.__getitem__)
    again = shapley(order, worth.__getitem__)
    assert sum(found.values()) == pytest.approx(worth[frozenset("abcd")] - worth[frozenset()], abs=1e-9)
    assert all(found[p] == pytest.approx(again[p], abs=1e-9) for p in "abcd")


path = st.text("ha", min_size=3, max_size=6).map(lambda s: "h" + s)
ending = st.sampled_from(["", "g"])


@settings(max_examples=15, deadline=None)
@given(
    st.lists(
        st.tuples(path, ending, st.integers(0, 3), st.sampled_from(["south", "north"])),
        min_size=4,
        max_size=12,
    ),
    st.integers(3, 5),
    st.integers(0, 2),
    st.sampled_from(["none", "constant"]),
)
def test_parts_of_random_histories_add_up(drawn, base, later, method):
    paths = {"hahhhhhh@south": 2, "haahahhh@north": 2, "hhhahg@south": 2, "hag@north": 1}
    for text, end, start, town in drawn:
        key = f"{start}.{text}{end}@{town}"
        paths[key] = paths.get(key, 0) + 1
    study = replace(PLAIN, horizon=4, joiners=JoinerSpec(method), value=ValueSpec("GBP", {"here": 3.0}))
    old, new = opened(tally(paths, last=base), study), opened(tally(paths, last=base + later), study)
    made = bridge(old, new)
    assert np.abs(gaps(made)).max() < 1e-9
    assert (made.frame.loc[made.frame["part"] == "data_restated", "amount"].abs() < 1e-9).all()


def test_a_run_against_itself_does_not_change():
    same = opened(tally(TEN, last=2))
    made = bridge(same, same)
    assert (made.frame.loc[made.frame["part"].isin(PARTS), "amount"] == 0).all()
    assert not len(made.details)
