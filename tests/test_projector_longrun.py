"""The long run: published chains of every kind, seasons and mixtures against brute force, intervals."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError
from cohortflow.projector.longrun import long_run
from cohortflow.states import States
from tests.projector_cases import (
    P,
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
    assert shares(found, "limit_from_start", "c") == pytest.approx(
        shares(found, "stationary_share", "group 1")
    )


def test_land_of_oz_returns():
    # Grinstead & Snell: pi = (.4, .2, .4), recurrence 5/2, 5, 5/2  (VERIFIED)
    oz = long_run(
        Chain(States(["rain", "nice", "snow"]), [[0.5, 0.25, 0.25], [0.5, 0, 0.5], [0.25, 0.25, 0.5]])
    )
    assert [oz.value("return_time", s, s) for s in ("rain", "nice", "snow")] == pytest.approx([2.5, 5, 2.5])
    # from rain, by hand: total variation .1, .025, .00625 after 1, 2, 3 steps -> settled to 1 % after 3
    assert oz.value("periods_to_settle", "", "nice") == 4  # .8, .2, .05, .0125, .003125
    assert "long run of 3 states per month: unique_limit" in repr(oz) and oz.about()["method"] == "none"


def test_a_start_without_customers_is_refused():
    with pytest.raises(CallError, match="start adds up to 0 customers; leave it out"):
        long_run(Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]]), start={"a": 0})
