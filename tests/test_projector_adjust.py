"""Manual overlays: they move on like everybody else, have a line of their own, and overdraw no state."""

from types import SimpleNamespace

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError
from cohortflow.projector.adjust import as_adjustments
from cohortflow.projector.mix import step_counts
from cohortflow.projector.project import project
from tests.projector_cases import CHAIN, MONTHS, SEPTEMBER, STATES, P, banded

BASE = {"steady": 100}


def test_rows_or_objects_by_label_or_ordinal():
    row = SimpleNamespace(period=SEPTEMBER + 1, state="steady", customers=5)
    found = as_adjustments(
        [row, ("2026-11", "paused", -2), ("2027-12", "fresh", 9)], CHAIN.schedule, SEPTEMBER, 3
    )
    assert found.tolist() == [[0, 5, 0, 0, 0], [0, 0, -2, 0, 0], [0, 0, 0, 0, 0]]
    assert as_adjustments([(2, "fresh", 1)], CHAIN.schedule, None, 2)[1, 0] == 1  # outside a calendar: ahead


def test_an_overlay_moves_on_like_everybody_else():
    found = project(
        CHAIN, start=BASE, periods=3, adjustments=[(1, "steady", 10), (2, "paused", -4)], draws=50
    )
    plain = step_counts(CHAIN, BASE, 3)
    extra = np.zeros((4, 5))
    extra[1, 1] = 10
    extra[2] = extra[1] @ P + [0, 0, -4, 0, 0]
    extra[3] = extra[2] @ P
    np.testing.assert_allclose(found.mean, plain + extra, atol=1e-12)
    bare = project(CHAIN, start=BASE, periods=3, draws=50)
    np.testing.assert_allclose(found.simulated, np.maximum(bare.simulated + extra, 0), atol=1e-9)


def test_it_is_a_line_of_its_own_and_everything_closes():
    frame = project(CHAIN, start=BASE, periods=2, adjustments=[(1, "steady", 10)], draws=2).rollforward
    overlay = frame[frame["line"] == "adjustment"].set_index("state")["customers"]
    assert overlay["steady"].tolist() == [10, 0] and overlay["paused"].tolist() == [0, 0]
    frame = frame.assign(step=frame.groupby(["state", "line", "exit"]).cumcount())
    wide = frame.groupby(["state", "step", "line"])["customers"].sum().unstack()
    closing = wide["opening"] - wide["lost"] + wide["moved_in"] - wide["moved_out"] + wide["adjustment"]
    np.testing.assert_allclose(wide["closing"], closing, atol=1e-9)
    plain = project(CHAIN, start=BASE, periods=2, draws=2).rollforward
    assert "adjustment" not in set(plain["line"])


def test_they_are_customers_who_were_there_not_new_ones():
    schedule, _ = banded()
    found = project(schedule, start={"live": 0}, periods=2, adjustments=[(1, "live", 100)], draws=2)
    # in live: a quarter new (.3 leave), three quarters old (.1 leave): 85 are left
    assert found.mean[2].tolist() == pytest.approx([85, 15])


def test_a_row_without_data_clouds_what_the_overlay_reaches():
    gap = P.copy()
    gap[2] = np.nan
    found = project(
        Chain(STATES, gap, period=MONTHS), start={}, periods=2, adjustments=[(1, "paused", 5)], draws=2
    )
    assert found.mean[1].tolist() == [0, 0, 5, 0, 0] and np.isnan(found.mean[2]).all()


def test_refusals():
    with pytest.raises(
        CallError, match='The adjustment of "steady" in 2026-09 lies before the first period ahead'
    ):
        as_adjustments([("2026-09", "steady", 1)], CHAIN.schedule, SEPTEMBER, 2)
    with pytest.raises(CallError, match='An adjustment changes who is there; "left" is an exit'):
        as_adjustments([(1, "left", 1)], CHAIN.schedule, None, 2)
    with pytest.raises(
        CallError, match=r'take more customers out of "steady" than it holds 1 periods ahead \(80'
    ):
        project(CHAIN, start=BASE, periods=2, adjustments=[(1, "steady", -81)], draws=2)
