"""Fit: rates, what is not identified, the table of transitions, draws, segments."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit
from cohortflow.estimator.interval import clopper_pearson, goodman, wilson
from cohortflow.states import States
from tests.bench.worlds import panel_tally, simulate

STATES = States(
    ["fresh", "steady", "quiet", "left"],
    exits=["left"],
    entries=["fresh"],
    impossible=[("steady", "fresh"), ("quiet", "fresh")],
)
P = np.array([[0.0, 0.8, 0.1, 0.1], [0.0, 0.85, 0.1, 0.05], [0.0, 0.3, 0.5, 0.2], [0, 0, 0, 1.0]])


def tally(customers=300, periods=13, seed=1, **options):
    rng = np.random.default_rng(seed)
    entry = rng.integers(0, periods - 1, customers)
    panel = simulate(P, np.zeros(customers, int), periods, rng, entry=entry)
    return panel_tally(panel, STATES, **options)


def test_rates_are_moves_over_departures():
    counts = tally()
    f = fit(counts)
    assert np.array_equal(f.n, counts.counts())
    assert np.allclose(f.P[:3], f.n[:3] / f.n[:3].sum(axis=1, keepdims=True)) and f.P[3].tolist() == [
        0,
        0,
        0,
        1,
    ]
    assert np.array_equal(f.chain.matrix, f.P) and np.array_equal(f.matrix.to_numpy(), f.P)
    assert np.array_equal(f.schedule.components[0].matrix(0), f.P)
    assert f.schedule.first == counts.meta.last and (f.first, f.last) == (0, 11)
    assert f.notes == () and "plain model: 4 states per step" in repr(f)


def test_what_is_not_identified_is_missing_or_flagged():
    # steady is never left, quiet never departs from: the panel has fresh -> steady, steady -> steady only
    panel = np.array([[0, 1, 1], [0, 1, 1], [0, 1, 2]])
    f = fit(panel_tally(panel[:2], STATES))
    assert np.isnan(f.P[2]).all() and f.schedule.unknown == ("quiet",) == f.chain.unknown
    assert f.notes[:2] == ("no_data:quiet", "undeclared_absorbing:steady")
    frame = f.interval().to_frame().set_index(["from", "to"])
    assert frame.loc[("quiet", "left"), ["low", "high", "note"]].tolist() == [0, 1, "no_data"]
    assert np.isnan(frame.loc[("quiet", "left"), "probability"])
    assert frame.loc[("steady", "fresh"), ["probability", "low", "high", "note"]].tolist() == [
        0,
        0,
        0,
        "structural_zero",
    ]
    assert (
        frame.loc[("steady", "left"), "note"] == "sampling_zero"
        and frame.loc[("steady", "left"), "high"] > 0.4
    )
    assert frame.loc[("steady", "steady"), "note"] == "undeclared_absorbing"
    assert frame.loc[("left", "left"), ["probability", "low", "high", "note"]].tolist() == [1, 1, 1, "exit"]
    drawn = f.draws(5, rng=1).matrices[0]
    assert np.isnan(drawn[:, 0, 2]).all() and np.allclose(drawn[:, 0, 3], [0, 0, 0, 1])


def test_few_at_risk_is_said():
    assert "few_at_risk:fresh" in fit(tally(20)).notes


def test_the_table_of_transitions_holds_what_the_methods_say():
    f = fit(tally())
    frame = f.interval(level=0.9, method="clopper_pearson").to_frame()
    columns = "segment from to count at_risk probability low high level method std_error design_effect note"
    assert list(frame.columns) == columns.split()
    row = frame.set_index(["from", "to"]).loc[("quiet", "left")]
    x, n = f.n[2, 3], f.n[2].sum()
    low, high = clopper_pearson(x, n, level=0.9)
    assert (row["count"], row["at_risk"], row["method"], row["segment"]) == (x, n, "clopper-pearson", "all")
    assert row[["low", "high"]].tolist() == [low, high]
    assert row["std_error"] == pytest.approx(np.sqrt(x / n * (1 - x / n) / n))
    low, _ = goodman(f.n[1], allowed=STATES.allowed[1])
    got = f.interval(method="goodman").to_frame().query("`from` == 'steady'")["low"]
    assert np.allclose(got, low)


def test_clustered_limits_use_the_effective_number():
    f = fit(tally())
    frame = f.interval(clustered=True).to_frame().set_index(["from", "to"]).loc[("quiet", "left")]
    cov = f.covariance("customer")
    n, p = f.at_risk[2], f.P[2, 3]
    effect = cov.variance[2, 3] / (p * (1 - p) / n)
    assert frame["design_effect"] == pytest.approx(effect)
    low, high = wilson(p * n / effect, n / effect, level=cov.level_for(0.95))
    assert frame[["low", "high"]].tolist() == pytest.approx([float(low), float(high)])
    assert f.interval(clustered="two_way", method="goodman").clustered == "two_way"


def test_bare_counts_without_buckets():
    f = fit(tally(buckets=1, full=False))
    assert "no_buckets" in f.notes and f.covariance().covariance_kind == "multinomial"
    assert f.draws(3, rng=1).size == 3
    with pytest.raises(NotIdentified, match="compares groups"):
        f.covariance("customer")


def test_segments_add_up():
    counts = tally(segment=np.arange(300) % 2)
    f = fit(counts, by="group")
    assert sorted(f.segments) == ["a", "b"]
    assert np.array_equal(f.segments["a"].n + f.segments["b"].n, f.n)
    frame = f.interval().to_frame()
    assert frame["segment"].unique().tolist() == ["all", "a", "b"]
    assert frame.groupby("segment")["count"].sum()["all"] == frame["count"].sum() / 2


def test_a_segment_of_one_customer_has_plain_limits():
    f = fit(tally(segment=np.append(1, np.zeros(299, int))), by="group")
    frame = f.interval(clustered=True).to_frame().set_index("segment")
    assert "no_buckets" in f.segments["b"].notes and frame.loc["b", "design_effect"].isna().all()
    assert frame.loc["a", "design_effect"].notna().any()


def test_draws_scatter_around_the_fit_and_keep_zeros():
    f = fit(tally())
    draws = f.draws(4000, rng=2)
    matrices = draws.matrices[0]
    assert matrices.shape == (4000, 1, 4, 4) and draws.part == "rates"
    assert np.allclose(matrices.sum(axis=3), 1) and (matrices[..., ~STATES.allowed] == 0).all()
    assert np.allclose(matrices[:, 0, 1].std(axis=0), f.covariance().std_error[1], rtol=0.06)
    assert np.array_equal(f.draws(2, rng=5).matrices[0], f.draws(2, rng=5).matrices[0])


def test_record_manners():
    f = fit(tally(), window=6, half_life=3, exclude=[9])
    about = f.to_dict()["about"]
    assert (about["first"], about["last"], about["excluded"]) == ("6", "12", ["9"])
    assert len(f.to_frame()) == 16 and f.effective[1] < f.rates.sums(f.rates.n)[1].sum()
    with pytest.raises(TypeError):
        f.segments["x"] = f


def test_refusals():
    counts = tally()
    with pytest.raises(CallError, match=r'Unknown model "plane" \(did you mean "plain"'):
        fit(counts, model="plane")
    with pytest.raises(CallError, match='The plain model takes no option "bands". Its options: "gaps"'):
        fit(counts, bands=[3])
    with pytest.raises(CallError, match='There is no segment "region"'):
        fit(counts, by="region")
