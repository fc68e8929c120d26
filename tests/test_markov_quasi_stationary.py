"""The mix of those remaining: by long products, and where it depends on the start or is missing."""

import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import remaining, remaining_from
from tests.markov_chains import LIFECYCLE, losing

INSIDE = LIFECYCLE[:4, :4]


def run_down(Q: np.ndarray, law: np.ndarray, periods: int = 5000) -> np.ndarray:
    for _ in range(periods):
        law = law @ Q
        law = law / law.sum()
    return law


@given(losing())
@settings(deadline=None)
def test_the_law_repeats_itself_and_the_loss_is_that_of_its_exits(Q):
    kept = remaining(Q)
    if np.isfinite(kept.mix).all():
        assert kept.mix @ Q == pytest.approx(kept.retention * kept.mix, abs=1e-12)
        assert kept.mix.sum() == pytest.approx(1)
        assert kept.mix @ (1 - Q.sum(axis=1)) == pytest.approx(1 - kept.retention, abs=1e-12)
    if np.isfinite(kept.weight).all():
        assert Q @ kept.weight == pytest.approx(kept.retention * kept.weight, abs=1e-10)
        assert kept.mix @ kept.weight == pytest.approx(1)


@given(losing())
@settings(deadline=None)
def test_where_it_exists_long_products_find_it(Q):
    kept = remaining(Q)
    if kept.exists and kept.ratio < 0.98:
        for start in kept.applies_to:
            assert run_down(Q, np.eye(len(Q))[start], 1500) == pytest.approx(kept.mix, abs=1e-9)
            assert remaining_from(Q, start) == pytest.approx(kept.mix, abs=1e-9)


def test_entry_states_that_are_never_entered_again_do_no_harm():
    # methods.md, section E, example matrix: lambda .93721486; u of R L D .350315 .427181 .222504
    # (recomputed there)
    kept = remaining(INSIDE)
    assert kept.retention == pytest.approx(0.93721486, abs=5e-9)
    assert kept.mix == pytest.approx([0, 0.350315, 0.427181, 0.222504], abs=5e-7)
    assert (kept.dominant, kept.applies_to, kept.code) == ((1, 2, 3), (0, 1, 2, 3), "exists")


def test_share_left_follows_the_weight():
    kept = remaining(INSIDE)
    for start in range(4):
        left = np.linalg.matrix_power(INSIDE, 300)[start].sum()
        assert left == pytest.approx(kept.retention**300 * kept.weight[start], rel=1e-9)


def test_the_ratio_is_the_speed():
    kept = remaining(INSIDE)
    moduli = np.sort(np.abs(np.linalg.eigvals(INSIDE)))
    assert kept.ratio == pytest.approx(moduli[-2] / moduli[-1])


def test_a_state_that_empties_more_slowly_than_what_leads_to_it_dominates():
    # 0 -> 1 and 1 keeps more: in the end all are in 1
    kept = remaining([[0.5, 0.2], [0.0, 0.8]])
    assert (kept.mix.tolist(), kept.retention, kept.dominant) == ([0.0, 1.0], 0.8, (1,))


def test_a_class_that_empties_faster_but_is_fed_stays_in_the_mix():
    # u1 (0.8 - 0.5) = 0.2 u0: 0.6 and 0.4; a start in 1 never gets to 0
    kept = remaining([[0.8, 0.2], [0.0, 0.5]])
    assert kept.mix.tolist() == pytest.approx([0.6, 0.4])
    assert (kept.code, kept.applies_to) == ("some_starts", (0,))
    assert "cannot be reached from the starts [1]" in kept.reason
    assert remaining_from([[0.8, 0.2], [0.0, 0.5]], 1).tolist() == [0.0, 1.0]


def test_ties_depend_on_the_start():
    Q = [[0.8, 0.0, 0.0], [0.0, 0.8, 0.0], [0.1, 0.3, 0.5]]
    kept = remaining(Q)
    assert kept.code == "depends_on_start" and not kept.exists and np.isnan(kept.mix).all()
    assert kept.retention == 0.8 and kept.ratio == 1.0
    assert "the classes [(0,), (1,)] keep the same share" in kept.reason
    # from state 2 the mass splits as its moves do, 1 : 3
    assert remaining_from(Q, 2).tolist() == pytest.approx([0.25, 0.75, 0.0])
    assert remaining_from(Q, [0.5, 0.5, 0.0]).tolist() == pytest.approx([0.5, 0.5, 0.0])


def test_lines_of_ties_are_slow_but_have_their_mix():
    # n 0.5^n of the starters in 0 pass on to 1: they end there, at a speed of 1/n
    Q = [[0.5, 0.2], [0.0, 0.5]]
    kept = remaining(Q)
    assert (kept.code, kept.mix.tolist(), kept.ratio) == ("exists", [0.0, 1.0], 1.0)
    assert kept.weight.tolist() == [np.inf, 1.0] and "slowly because classes tie" in kept.reason
    assert run_down(np.array(Q), np.array([1.0, 0.0]), 4000)[1] == pytest.approx(1, abs=1e-3)


def test_two_ends_of_lines_by_long_product():
    Q = np.zeros((6, 6))
    Q[0, :3], Q[1, 1], Q[2, 2:4] = [0.5, 0.2, 0.1], 0.5, [0.5, 0.2]
    Q[3, 3], Q[4, 4], Q[4, 0], Q[5, 1], Q[5, 2], Q[5, 5] = 0.2, 0.3, 0.4, 0.3, 0.1, 0.2
    # from 5: no line, so the limit is reached geometrically; from 0 only as 1/n
    assert remaining_from(Q, 5) == pytest.approx(run_down(Q, np.eye(6)[5]), abs=1e-12)
    assert remaining_from(Q, 4) == pytest.approx(run_down(Q, np.eye(6)[4]), abs=1e-3)


def test_a_periodic_class_repeats_its_law_but_does_not_settle():
    Q = [[0.0, 0.8], [0.2, 0.0]]
    kept = remaining(Q)
    assert (kept.code, kept.exists, kept.ratio) == ("periodic", False, pytest.approx(1.0))
    assert kept.mix.tolist() == pytest.approx([1 / 3, 2 / 3])
    with pytest.raises(
        NotIdentified, match="no mix of those remaining from this start: the class .* is periodic"
    ):
        remaining_from(Q, 0)


def test_when_all_leave_in_finite_time_nobody_remains():
    Q = [[0.0, 0.6], [0.0, 0.0]]
    kept = remaining(Q)
    assert (kept.code, kept.retention, kept.applies_to) == ("dies_out", 0.0, ())
    assert np.isnan(kept.mix).all() and np.isnan(kept.weight).all()
    with pytest.raises(NotIdentified, match="everybody has left after finitely many periods"):
        remaining_from(Q, 0)


def test_reasons_name_states_as_the_caller_does():
    Q = np.zeros((3, 3))
    Q[1, 2], Q[2, 1] = 0.8, 0.2
    with pytest.raises(NotIdentified, match=r"the class \(1, 2\) is periodic"):
        remaining_from(Q, 1)


def test_undeclared_absorbing_states_keep_everybody():
    kept = remaining([[0.5, 0.3], [0.0, 1.0]])
    assert (kept.retention, kept.mix.tolist()) == (1.0, [0.0, 1.0])


def test_rows_above_one_are_refused():
    with pytest.raises(CallError, match="row 0 of Q sums to 1.1; no row may sum to more than 1"):
        remaining([[0.5, 0.6], [0.0, 0.5]])
