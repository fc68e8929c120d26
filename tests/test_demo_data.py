"""The demo's generator: reproducible, true to its tables, and the files beside it are what it writes."""

import csv
import gzip
import hashlib
import tomllib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from cohortflow.study import read_study
from demo_data import members as scheme
from demo_data.generate import generate, write

DEMO = Path(__file__).parents[1] / "demo_data"
STUDY = tomllib.loads((DEMO / "veg_box.toml").read_text())


@pytest.fixture(scope="module")
def clean() -> pd.DataFrame:
    return generate(1500, 24, seed=5, dirt=False)


def test_the_same_seed_gives_the_same_rows_and_another_one_does_not():
    first, again, other = (generate(200, 14, seed=seed) for seed in (3, 3, 4))
    pd.testing.assert_frame_equal(first, again)
    assert not first.equals(other)


def test_written_twice_the_files_are_identical(tmp_path):
    log = generate(200, 14, seed=3)
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    names = [path.name for path in write(tmp_path / "a", log)]
    write(tmp_path / "b", log)
    assert names == ["events-2023.csv.gz", "events-2024.csv.gz"]
    for name in (*names, "events.sha256"):
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()


def test_the_committed_files_have_the_noted_checksums():
    noted = dict(line.split()[::-1] for line in (DEMO / "events.sha256").read_text().splitlines())
    assert sorted(noted) == sorted(path.name for path in DEMO.glob("events-*.csv.gz"))
    for name, digest in noted.items():
        assert hashlib.sha256((DEMO / name).read_bytes()).hexdigest() == digest


@pytest.mark.slow
def test_the_generator_writes_the_committed_files_again(tmp_path):
    for path in write(tmp_path, generate()):  # unpacked, since zlib's bytes differ from build to build
        assert gzip.decompress(path.read_bytes()) == gzip.decompress((DEMO / path.name).read_bytes())


def test_the_columns_are_those_that_the_study_file_names(clean):
    spec = STUDY["input"]
    named = [spec[key] for key in ("event_id", "customer", "time", "event", "amount")]
    assert list(clean.columns) == [*named, *spec["segments"], *spec["attributes"], spec["arm"]]


def test_the_study_file_is_accepted_and_names_the_states_of_the_generator():
    study = read_study(DEMO / "veg_box.toml")
    assert study.states.names == scheme.STATES
    assert (study.states.exits, study.states.away) == (("cancelled", "card_lapsed"), ("paused",))
    assert study.warm_up == 2  # the longest window of a rule: two silent months


def test_tables_of_true_rates_are_probability_rows():
    for table in (scheme.RESTLESS, scheme.STEADY):
        assert (table >= 0).all()
        np.testing.assert_allclose(table.sum(axis=1), 1, rtol=0, atol=1e-12)
    for table in (scheme.CHANNELS, scheme.AGES):
        assert sum(share for share, _ in table.values()) == pytest.approx(1)


def test_truth_without_differences_and_seasons_is_the_typical_table():
    truth = scheme.transition_truth(differences=False, seasons=False)
    # By hand, weekly row: means of .028 .003 / 0 / .034 .006 / 0 / .050 .004 / .818 .980 / .070 .007.
    expected = [0.0155, 0, 0.020, 0, 0.027, 0.899, 0.0385]
    np.testing.assert_allclose(truth.loc["weekly"], expected, atol=1e-12)
    # Quiet: .070 .020 / .120 .060 / .030 .020 / 0 / .500 .380 / .100 .260 / .180 .260.
    np.testing.assert_allclose(truth.loc["quiet"], [0.045, 0.09, 0.025, 0, 0.44, 0.18, 0.22], atol=1e-12)


def test_truth_of_the_taster_row_by_hand():
    # Two months and nobody there before: the only moves are those of the joiners' first month, the mean of
    # (.060 .010 .930) and (.020 .005 .975) to cancelled, paused, taster.
    truth = scheme.transition_truth(months=2, differences=False, seasons=False)
    np.testing.assert_allclose(truth.loc["taster"], [0.04, 0, 0.0075, 0.9525, 0, 0, 0], atol=1e-12)


@pytest.mark.parametrize("differences", [False, True])
def test_truth_agrees_with_simulated_members(differences):
    # An independent way: 200,000 members drawn in pieces against the expected masses. Moves of one member are
    # not independent, so the error is that between pieces: t with 19 degrees of freedom, 31 cells.
    truth = scheme.transition_truth(differences=differences).to_numpy()
    pieces = np.array([_pooled(10_000, seed, differences) for seed in range(20)])
    error = pieces.std(axis=0, ddof=1) / np.sqrt(20)
    free = truth > 0
    assert free.sum() == 31
    assert (np.abs(pieces.mean(axis=0) - truth)[free] < 4.5 * error[free]).all()
    assert (pieces[:, ~free] == 0).all()


def _pooled(members: int, seed: int, differences: bool) -> np.ndarray:
    """Rates counted from the arrays; exits are held, so that their rows can be seen."""
    customer, period, state = scheme.state_history(
        members, seed=seed, shocks=False, differences=differences, hold_exits=True
    )
    unknown = np.isin(customer, customer[(period == 0) & (state != scheme.STATES.index("taster"))])
    pair = (customer[1:] == customer[:-1]) & ~(unknown & (period < 2))[:-1]
    counts = np.zeros((7, 7))
    np.add.at(counts, (state[:-1][pair], state[1:][pair]), 1)
    return counts / counts.sum(axis=1, keepdims=True)


def test_state_history_writes_an_exit_once_and_pieces_join():
    customer, period, state = scheme.state_history(400, seed=2, first_customer=1000)
    frame = pd.DataFrame({"customer": customer, "period": period, "state": state})
    assert frame["customer"].min() == 1000 and frame["customer"].nunique() == 400
    followed = frame.assign(before=frame.groupby("customer")["state"].shift()).dropna()
    exits = [scheme.STATES.index("cancelled"), scheme.STATES.index("card_lapsed")]
    after_exit = followed[followed["before"].isin(exits)]
    assert len(after_exit) and (after_exit["state"] == scheme.STATES.index("taster")).all()


def test_pieces_with_one_shock_seed_share_their_shocks():
    rates = [scheme.state_history(20_000, 12, seed=seed, shock_seed=9, differences=False) for seed in (1, 2)]
    alone = scheme.state_history(20_000, 12, seed=2, shock_seed=10, differences=False)
    shares = [np.bincount(h.period, weights=h.state < 2) / np.bincount(h.period) for h in (*rates, alone)]
    assert np.abs(shares[0] - shares[1]).max() < np.abs(shares[0] - shares[2]).max()


def test_shocks_off_leaves_the_people_as_they_were():
    on, off = (scheme.draw_members(500, seed=7, shocks=shocks) for shocks in (True, False))
    assert not np.array_equal(on.walk, off.walk)
    np.testing.assert_array_equal(np.bincount(on.joined + 1)[0], np.bincount(off.joined + 1)[0])


def test_boxes_follow_the_states(clean):
    # Joiners' numbers run in the order of joining, as the rows of `walk`; those who left at once come last.
    people = scheme.draw_members(1500, 24, seed=5)
    walk = people.walk[people.joined >= 0]
    numbers = np.sort(clean.loc[clean["what"] == "joined", "member"].to_numpy())[: len(walk)]
    boxes = clean[(clean["what"] == "delivered") & clean["member"].isin(numbers)]
    month = pd.to_datetime(boxes["at"]).dt.year * 12 + pd.to_datetime(boxes["at"]).dt.month - (2023 * 12 + 10)
    counts = np.zeros(walk.shape, dtype=int)
    np.add.at(counts, (np.searchsorted(numbers, boxes["member"].to_numpy()), month.to_numpy()), 1)
    assert (counts[np.isin(walk, [scheme.QUIET, scheme.CARD_LAPSED, scheme.NOT_YET])] == 0).all()
    # Wrong for a weekly member: two of four boxes skipped, 6 x .025^2 = .004, and more in months of resuming
    # (a week or two may be over); for a fortnightly one: both boxes skipped, .0006, or one after the first.
    assert (counts[walk == scheme.WEEKLY] >= 3).mean() > 0.99
    assert np.isin(counts[walk == scheme.FORTNIGHTLY], [1, 2]).mean() > 0.995
    # Boxes in the month of cancelling stop with it: none in the months after.
    stayed_away = (walk[:, 1:] == scheme.CANCELLED) & (walk[:, :-1] == scheme.CANCELLED)
    assert stayed_away.any() and (counts[:, 1:][stayed_away] == 0).all()


def test_a_clean_log_has_nothing_to_reject(clean):
    assert clean["row_id"].is_unique
    assert pd.to_datetime(clean["at"], format="%Y-%m-%d %H:%M").is_monotonic_increasing
    assert clean["at"].max() < "2025-10-01"
    known = {"joined", "rejoined", "paused", "resumed", "cancelled", "delivered", "card_declined"}
    assert set(clean["what"]) == known | {"newsletter_opened"}
    assert (clean["member"].str.len() == 5).all()
    assert clean.groupby("member")[["channel", "age_band", "trial"]].nunique().eq(1).all(axis=None)
    assert (clean["pounds"] != "").equals(clean["what"] == "delivered")


def test_dirt_is_of_many_kinds_and_below_one_per_cent(clean):
    dirty = generate(1500, 24, seed=5)
    at = pd.to_datetime(dirty["at"], errors="coerce", format="%Y-%m-%d %H:%M")
    kinds = {
        "bad date": at.isna(),
        "blank id": dirty["member"].str.strip() == "",
        "sent twice": dirty.duplicated(),
        "unknown event": dirty["what"].isin(["box_swapped", "recipe_viewed", "deliverd"]),
        "after the as-of date": at >= "2025-10-01",
    }
    assert all(kind.any() for kind in kinds.values())
    assert np.mean(np.logical_or.reduce(list(kinds.values()))) < 0.01
    spelt = set(dirty["what"]) - set(clean["what"]) - {"box_swapped", "recipe_viewed", "deliverd"}
    assert spelt == set(STUDY["events"]["map"]["cancelled"])


def test_the_plan_files_cover_the_horizon():
    ahead = [str(pd.Period("2026-09", "M") + h) for h in range(1, STUDY["study"]["horizon"] + 1)]
    with (DEMO / "budget.csv").open() as budget, (DEMO / "planned_joiners.csv").open() as planned:
        assert [row["period"] for row in csv.DictReader(budget) if row["total"] == "all_live"] == ahead
        assert [row["period"] for row in csv.DictReader(planned) if row["kind"] == "joined"] == ahead
