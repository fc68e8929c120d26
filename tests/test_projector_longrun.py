"""The long run: published chains of every kind, seasons and mixtures against brute force, intervals."""

import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.chain import Chain, Component, Draws, Schedule
from cohortflow.projector.joiners import Inflow, Joiners
from cohortflow.projector.longrun import long_run
from cohortflow.projector.mix import step_counts
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    MONTHS,
    SEPTEMBER,
    STATES,
    P,
    banded,
    chains,
    dirichlet_draws,
    multinomial,
    seasonal,
    two_types,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_unemployment_chain():
    # Hamilton (2005), Fed. Reserve Bank of St. Louis Review 87(4): (.8128, .16256, .02464)  (MEMORY)
    chain = Chain(States(["a", "b", "c"]), [[0.971, 0.029, 0], [0.145, 0.778, 0.077], [0, 0.508, 0.492]])
    found = long_run(chain)
    assert found.verdict == "unique_limit" and found.reasons == ("closed_group:a+b+c",)
    assert list(shares(found, "stationary_share", "group 1").values()) == pytest.approx(
        [0.8128, 0.16256, 0.02464], abs=5e-6
    )
    assert shares(found, "limit_from_start", "c") == pytest.approx(shares(found, "stationary_share", "group 1"))


def test_land_of_oz_returns():
    # Grinstead & Snell: pi = (.4, .2, .4), recurrence 5/2, 5, 5/2  (VERIFIED)
    oz = long_run(Chain(States(["rain", "nice", "snow"]), [[0.5, 0.25, 0.25], [0.5, 0, 0.5], [0.25, 0.25, 0.5]]))
    assert [oz.value("return_time", s, s) for s in ("rain", "nice", "snow")] == pytest.approx([2.5, 5, 2.5])
    # from rain, by hand: total variation .1, .025, .00625 after 1, 2, 3 steps -> settled to 1 % after 3
    assert oz.value("periods_to_settle", "", "nice") == 4  # .8, .2, .05, .0125, .003125
    assert "long run of 3 states per month: unique_limit" in repr(oz) and oz.about()["method"] == "none"


def test_ten_states_in_three_closed_groups():
    # Feres' ten-state chain, R markovchain vignette 4.3-4.5 (VERIFIED): recurrence a 1.5 c 3, b 2.555556 g 2.875
    # i 3.833333, f 1; recomputed: from h 1/3 into {a,c}, 2/3 into {b,g,i}
    third = 1 / 3
    rows = [
        [0.5, 0, 0.5, 0, 0, 0, 0, 0, 0, 0],
        [0, third, 0, 0, 0, 0, 2 * third, 0, 0, 0],
        [1, 0, 0, 0, 0, 0, 0, 0, 0, 0],
        [0, 0, 0, 0, 1, 0, 0, 0, 0, 0],
        [0, 0, 0, third, third, 0, 0, 0, third, 0],
        [0, 0, 0, 0, 0, 1, 0, 0, 0, 0],
        [0, 0, 0, 0, 0, 0, 0.25, 0, 0.75, 0],
        [0, 0, 0.25, 0.25, 0, 0, 0, 0.25, 0, 0.25],
        [0, 1, 0, 0, 0, 0, 0, 0, 0, 0],
        [0, third, 0, 0, third, 0, 0, 0, 0, third],
    ]
    found = long_run(Chain(States(list("abcdefghij")), rows))
    assert found.verdict == "depends_on_start"
    assert found.reasons == ("closed_group:a+c", "closed_group:b+g+i", "closed_group:f", "several_groups")
    times = {s: found.value("return_time", s, s) for s in "acbgif"}
    published = {"a": 1.5, "c": 3, "b": 2.555556, "g": 2.875, "i": 3.833333, "f": 1}
    assert times == pytest.approx(published, abs=5e-7)
    limit = shares(found, "limit_from_start", "h")
    assert limit["a"] + limit["c"] == pytest.approx(1 / 3)
    assert limit["b"] + limit["g"] + limit["i"] == pytest.approx(2 / 3)


def test_ehrenfest_has_no_limit_but_a_time_average():
    # Ehrenfest n = 4, period 2: pi = (1,4,6,4,1)/16  (Grinstead & Snell, VERIFIED)
    urn = np.zeros((5, 5))
    for i in range(5):
        if i:
            urn[i, i - 1] = i / 4
        if i < 4:
            urn[i, i + 1] = 1 - i / 4
    found = long_run(Chain(States(list("abcde")), urn))
    assert found.verdict == "no_limit" and "periodic_group:a+b+c+d+e" in found.reasons
    assert found.value("group_period", "", "group 1") == 2
    assert list(shares(found, "time_average", "a").values()) == pytest.approx(np.array([1, 4, 6, 4, 1]) / 16)
    frame = found.to_frame()
    assert frame.loc[frame["measure"] == "limit_from_start", "note"].unique().tolist() == ["no_limit"]
    assert found.value("periods_to_settle", "", "a") == np.inf


def test_recency_ladder_of_those_remaining():
    # Pfeifer & Carraway (2000) ladder; lambda and mix recomputed (companion of Darroch & Seneta 1965)
    states = States(["r1", "r2", "r3", "r4", "gone"], exits=["gone"])
    rows = [[0.3, 0.7, 0, 0, 0], [0.2, 0, 0.8, 0, 0], [0.15, 0, 0, 0.85, 0], [0.05, 0, 0, 0, 0.95], [0, 0, 0, 0, 1]]
    found = long_run(Chain(states, rows))
    assert found.verdict == "exits_only"
    assert found.value("remaining_retention") == pytest.approx(0.720123920581, abs=1e-11)
    mix = [0.231130327849, 0.224671372343, 0.249591900419, 0.294606399389]
    assert list(shares(found, "remaining_mix", "").values()) == pytest.approx(mix, abs=1e-11)


def test_killed_walk_keeps_cos_pi_over_n():
    # Darroch & Seneta (1965): walk on 0..4 killed at both ends, lambda = cos(pi/4), mix ~ sin(i pi/4)  (MEMORY)
    states = States(list("abcde"), exits=["a", "e"])
    walk = np.eye(5)
    for i in (1, 2, 3):
        walk[i] = 0
        walk[i, i - 1] = walk[i, i + 1] = 0.5
    found = long_run(Chain(states, walk))
    assert found.value("remaining_retention") == pytest.approx(np.cos(np.pi / 4), abs=1e-14)
    mix = list(shares(found, "remaining_mix", "").values())
    assert mix == pytest.approx([0.29289322, 0.41421356, 0.29289322], abs=5e-9)
    assert set(found.to_frame().query("measure == 'remaining_mix'")["note"]) == {"periodic"}


def test_settled_base_by_hand():
    # 10 fresh a period: fresh 10; steady m = 8 + .8 m + .5 q, paused q = .1 m + .4 q -> m = 480/7, q = 80/7
    found = long_run(CHAIN, joiners={"fresh": 10})
    base = shares(found, "settled_base", "")
    assert base == pytest.approx({"fresh": 10, "steady": 480 / 7, "paused": 80 / 7, "all_live": 550 / 7})
    assert sum(shares(found, "settled_mix", "").values()) == pytest.approx(1)
    far = step_counts(CHAIN, {"fresh": 10}, 400, [10, 0, 0, 0, 0])[400]
    assert far[:3] == pytest.approx([10, 480 / 7, 80 / 7])


def test_a_base_without_an_exit_grows_for_ever():
    chain = Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]])
    frame = long_run(chain, joiners={"a": 1}).to_frame().query("measure == 'settled_base'")
    assert frame["note"].tolist() == ["grows_without_limit"] and frame["value"].isna().all()


def test_a_live_group_beside_exits_depends_on_the_start():
    states = States(["a", "b", "gone"], exits=["gone"])
    found = long_run(Chain(states, [[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]]))
    assert found.verdict == "depends_on_start"
    assert found.reasons == ("closed_group:b", "exits_reachable")
    assert shares(found, "limit_from_start", "a") == pytest.approx({"a": 0, "b": 0.6, "gone": 0.4})


def test_seasons_settle_into_a_mix_for_each_month():
    one = np.array([[0.9, 0.1], [0.3, 0.7]])
    two = np.array([[0.6, 0.4], [0.3, 0.7]])
    schedule = seasonal([one] * 11 + [two], states=States(["a", "b"]))
    found = long_run(schedule, base_period=SEPTEMBER + 3)
    assert found.verdict == "unique_cycle"
    frame = found.to_frame().query("measure == 'stationary_share' and state == 'a'").set_index("note")["value"]
    x = step_counts(schedule, [1, 0], 12 * 40 + 12)[12 * 40 :, 0]  # brute force: forty years on, from September
    for k in range(12):
        month = MONTHS.position(SEPTEMBER + k) + 1
        assert frame[f"position:{month}"] == pytest.approx(x[k], abs=1e-12)
    limits = found.to_frame().query("measure == 'limit_from_start' and state == 'a' and `from` == 'b'")
    assert sorted(limits["value"]) == pytest.approx(sorted(frame))
    assert found.value("time_average", "a", "a") == pytest.approx(x[:12].mean())


def test_seasons_of_a_base_that_loses_people():
    matrices = [P, OTHER, P]
    schedule = seasonal(matrices)
    found = long_run(schedule, joiners={"fresh": 10}, base_period=SEPTEMBER)
    frame = found.to_frame()
    base = frame.query("measure == 'settled_base' and state == 'steady'")["value"].tolist()
    far = step_counts(schedule, {"fresh": 10}, 902, [10, 0, 0, 0, 0])[900:, 1]
    assert base == pytest.approx(far.tolist(), rel=1e-9)
    x = np.array([0, 1.0, 0])
    for k in range(300):
        x = x @ matrices[k % 3][:3, :3]
        x = x / x.sum()
    mix = frame.query("measure == 'remaining_mix'")["value"].to_numpy().reshape(3, 3)
    np.testing.assert_allclose(mix[0], x, atol=1e-12)
    product = np.linalg.multi_dot([m[:3, :3] for m in matrices])
    top = np.abs(np.linalg.eigvals(product)).max() ** (1 / 3)
    assert found.value("remaining_retention") == pytest.approx(top)


def test_of_two_kinds_the_sticky_remain():
    schedule, _ = two_types()
    found = long_run(schedule, joiners={"here": 10})
    assert found.value("remaining_retention") == pytest.approx(0.98)
    assert found.to_frame().query("measure == 'remaining_mix'")["note"].tolist() == ["component:sticky"]
    # half of ten a period stay 50 periods, half 5: 5 x 50 + 5 x 5
    assert found.value("settled_base", "all_live") == pytest.approx(275)


def test_expanded_states_are_reported_as_declared():
    schedule, _ = banded()
    found = long_run(schedule, joiners={"live": 10})
    # new 10, old 7 / .1 = 70
    assert found.value("settled_base", "live") == pytest.approx(80)
    assert found.value("remaining_retention") == pytest.approx(0.9)


def test_those_who_never_move_form_groups_of_their_own():
    states = States(["a", "b"])
    half = np.diag([0.5, 0.5])
    movers = Component(np.array([[[0.8, 0.2], [0.4, 0.6]]]), [0, 1], half, half, name="movers")
    stayers = Component(np.eye(2)[None], [0, 1], half, half, name="stayers")
    found = long_run(Schedule(states, (movers, stayers), MONTHS))
    assert found.verdict == "depends_on_start" and "several_groups" in found.reasons
    # half of those in a are movers and end 2/3 in a
    assert shares(found, "limit_from_start", "a") == pytest.approx({"a": 0.5 + 0.5 * 2 / 3, "b": 0.5 / 3})


def test_rows_without_data_are_said():
    gap = P.copy()
    gap[2] = np.nan
    found = long_run(Chain(STATES, gap), joiners={"fresh": 1})
    frame = found.to_frame()
    assert found.verdict == "not_identified" and found.reasons[-1] == "rows_without_data:paused"
    assert (frame["note"] == "rows_without_data").all() and frame["value"].isna().all()


def test_what_does_not_reach_the_row_without_data_stays_defined():
    gap = P.copy()
    gap[0] = np.nan  # nobody becomes fresh again, so steady and paused are as before
    found, full = long_run(Chain(STATES, gap), joiners={"steady": 5}), long_run(CHAIN, joiners={"steady": 5})
    assert found.verdict == "exits_only"
    assert found.value("remaining_retention") == pytest.approx(full.value("remaining_retention"))
    assert found.value("settled_base", "all_live") == pytest.approx(full.value("settled_base", "all_live"))
    frame = found.to_frame()
    assert frame.loc[frame["note"] == "rows_without_data", "from"].tolist() == ["fresh"]


def test_delta_and_draws_agree():
    M = dirichlet_draws(P, 800, 400)
    options = {"joiners": {"fresh": 10}, "start": {"steady": 1}}
    by_delta = long_run(CHAIN, covariance=multinomial(P, 800), **options)
    by_draws = long_run(CHAIN, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]), **options)
    one, two = (f.to_frame().set_index(["measure", "state", "from"]) for f in (by_delta, by_draws))
    keys = [k for k in one.index if np.isfinite(one.loc[k, "low"])]
    assert {k[0] for k in keys} == {
        "limit_from_start", "remaining_retention", "remaining_mix", "settled_base", "settled_mix"
    }  # fmt: skip
    for key in keys:
        for side in ("low", "high"):
            assert one.loc[key, side] == pytest.approx(two.loc[key, side], rel=0.15, abs=0.01), key


def test_delta_interval_of_a_stationary_share_by_hand():
    # see test_projector_delta: var = 1.875^2 x .0009 + .625^2 x .0021 = .003984375; logit scale at .75
    Q = np.array([[0.9, 0.1], [0.3, 0.7]])
    found = long_run(Chain(States(["a", "b"]), Q), covariance=multinomial(Q, 100), level=0.95)
    row = found.to_frame().query("measure == 'stationary_share' and state == 'a'").iloc[0]
    step = 1.959963984540054 * np.sqrt(0.003984375) / (0.75 * 0.25)
    odds = 3 * np.exp([-step, step])
    assert [row["low"], row["high"]] == pytest.approx(list(odds / (1 + odds)))
    time = found.to_frame().query("measure == 'return_time' and state == 'a'").iloc[0]
    assert time["low"] < 4 / 3 < time["high"]
    limit = found.to_frame().query("measure == 'limit_from_start' and state == 'a'")
    assert limit["low"].tolist() == [row["low"]] * 2


def test_uncertain_joiners_widen_the_settled_base():
    sure = Inflow(np.full(3, 10.0), np.zeros((3, 3)), np.tile(np.eye(5)[0], (3, 1)))
    unsure = Inflow(np.full(3, 10.0), np.full((3, 3), 4.0), np.tile(np.eye(5)[0], (3, 1)))
    widths = []
    for inflow in (sure, unsure):
        joiners = Joiners(STATES, MONTHS, None, "test", {"joined": inflow})
        found = long_run(CHAIN, joiners=joiners, covariance=multinomial(P, 800)).to_frame()
        row = found.query("measure == 'settled_base' and state == 'all_live'").iloc[0]
        widths.append(np.log(row["high"] / row["low"]) ** 2)
    # relative variance 4/100 of the rate adds (2 z)^2 x .04 to the squared width on the log scale
    assert widths[1] - widths[0] == pytest.approx((2 * 1.6448536) ** 2 * 0.04, rel=1e-6)


@settings(max_examples=30, deadline=None)
@given(chains(exits=0))
def test_stationary_laws_stay_and_return_times_invert_them(chain):
    found = long_run(chain)
    pi = np.array(list(shares(found, "stationary_share", "group 1").values()))
    np.testing.assert_allclose(pi @ chain.matrix, pi, atol=1e-12)
    times = np.array([found.value("return_time", s, s) for s in chain.states.names])
    np.testing.assert_allclose(pi * times, 1, rtol=1e-12)
