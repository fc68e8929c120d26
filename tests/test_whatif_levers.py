"""The ranking of levers: order, doubt, chance of being the best, and the table."""

import numpy as np
import pytest

from cohortflow.chain import Draws
from cohortflow.errors import CallError
from cohortflow.projector.unroll import drawn_schedule
from cohortflow.whatif import sensitivity
from cohortflow.whatif.effects import effects
from tests.projector_cases import CHAIN, P, two_types
from tests.whatif_cases import JOINERS, MONEY, START, draws_of_chain, fit_like


def test_the_rank_is_by_the_size_of_one_point():
    found = sensitivity(CHAIN, target="settled_base", joiners=JOINERS)
    frame = found.to_frame()
    assert list(frame.columns) == [
        "segment", "from", "to", "target", "per_point", "elasticity", "low", "high", "rank", "chance_best",
    ]  # fmt: skip
    ranked = frame[frame["rank"].notna()]
    assert ranked["rank"].tolist() == list(range(1, len(ranked) + 1))
    assert ranked["per_point"].abs().is_monotonic_decreasing
    # what occurs in P: fresh 3 moves, steady 3, paused 4; the others have a slope but no rank
    assert len(ranked) == 10 and len(frame) == 15 and frame["low"].isna().all()
    assert (frame["target"] == "settled_base:all_live").all()
    # by hand, staying steady: dF/dp_ss compensated, one point
    both = effects(found.target, CHAIN.schedule, "proportional").slope
    assert found.per_point == pytest.approx(both / 100, nan_ok=True)


def test_only_the_named_moves_compete():
    found = sensitivity(CHAIN, target="life:steady", moves=[("paused", "steady"), ("steady", "lapsed")])
    ranked = found.to_frame().dropna(subset="rank")
    assert sorted(zip(ranked["from"], ranked["to"], strict=True)) == [
        ("paused", "steady"),
        ("steady", "lapsed"),
    ]


def test_limits_and_chances_are_those_of_the_draws():
    draws = draws_of_chain(50, at_risk=60)
    found = sensitivity(CHAIN, target="base", horizon=6, start=START, draws=draws, level=0.8)
    each = np.array(
        [effects(found.target, drawn_schedule(draws, d), "proportional").slope for d in range(50)]
    )
    low, high = (np.quantile(each[:, 1, 3], q, method="inverted_cdf") / 100 for q in (0.1, 0.9))
    assert (found.limits[0][1, 3], found.limits[1][1, 3]) == pytest.approx((low, high))
    best = np.where(found.ranked, np.abs(each), -1).reshape(50, -1).argmax(axis=1)
    assert found.chance_best[np.unravel_index(best[0], (5, 5))] == pytest.approx((best == best[0]).mean())
    assert np.nansum(found.chance_best) == pytest.approx(1)


def test_draws_from_a_fit_like_model_and_record_manners():
    found = sensitivity(fit_like(), target="value", start=START, value=MONEY, draws=10, segment="web")
    assert found.about()["draws"] == 10 and found.about()["target"] == "value:base"
    assert repr(found).startswith("<levers of value:base (") and 'most: "' in repr(found)
    assert found.to_frame()["segment"].unique().tolist() == ["web"] and found.to_dict()["kind"] == "levers"
    assert (found.limits[0] <= found.limits[1])[found.ranked].all()


def test_a_draw_without_the_figure_leaves_no_interval():
    matrices = np.stack([P, P])
    matrices[1, :3] = [[0, 1, 0, 0, 0], [0, 0.9, 0.1, 0, 0], [0, 0.5, 0.5, 0, 0]]  # nobody leaves
    draws = Draws.of_matrices(CHAIN.schedule, [matrices[:, None]])
    found = sensitivity(CHAIN, target="life:steady", draws=draws)
    assert np.isnan(found.limits[0]).all()


def test_hidden_kinds_have_one_ranking():
    schedule, _ = two_types()
    found = sensitivity(schedule, target="life:here")
    assert found.per_point[0, 1] == pytest.approx(-0.01 * (0.5 / 0.02**2 + 0.5 / 0.2**2))


def test_an_empty_balance_is_refused():
    with pytest.raises(CallError, match="balance is empty; name moves of the row"):
        sensitivity(CHAIN, target="life:steady", balance=[])
    with pytest.raises(CallError, match='Unknown state "nobody"'):
        sensitivity(CHAIN, target="life:steady", balance=["nobody"])
