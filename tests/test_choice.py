"""Choice by backtest."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.assessment.backtest import OF_ORIGIN, Backtest
from cohortflow.assessment.choice import choose, origin_losses
from cohortflow.errors import CallError, NotIdentified


def record(scores, models=("plain", "tenure"), quantities=("all_live",), horizon=1):
    """Backtest whose interval scores are scores[model][origin], the same at every horizon and quantity."""
    rows = [
        (m, f"{o:02d}", h, q, s)
        for m, line in scores.items()
        for o, s in enumerate(line)
        for h in range(1, horizon + 1)
        for q in quantities
    ]
    frame = pd.DataFrame(rows, columns=["model", "origin", "horizon", "quantity", "interval_score"])
    empty = pd.DataFrame()
    past = {q: np.ones(3) for q in (*quantities, OF_ORIGIN)}
    return Backtest(frame, empty, empty, past, tuple(models), (3,), 0, horizon, 0.9, 100, "none")


PLAIN = [10.0, 12.0, 8.0, 10.0, 11.0, 9.0, 10.0, 10.0]
BETTER = [s * 0.8 + 0.01 * i for i, s in enumerate(PLAIN)]


def test_by_hand():
    found = choose(record({"plain": PLAIN, "tenure": BETTER}))
    # losses: plain's mean is 10, so plain 1; tenure (8 + .01 x 3.5) / 10 = .8035
    assert (found.model, found.runner_up) == ("tenure", "plain")
    assert found.gain == pytest.approx(1 - 0.8035)
    frame = found.to_frame().set_index("model")
    assert frame["loss"].tolist() == pytest.approx([0.8035, 1.0])
    assert frame["difference"].tolist() == pytest.approx([0.0, 0.1965])
    assert found.notes == ("clear",) and found.p_value < 0.001
    assert frame["chance_best"].tolist() == [1.0, 0.0]
    assert found.headline() == "choice by backtest: tenure, 19.7% better than plain (8 origins)"


def test_doubt_is_said():
    rng = np.random.default_rng(1)
    noisy = {"plain": rng.lognormal(2, 0.5, 8), "tenure": rng.lognormal(2, 0.5, 8)}
    found = choose(record(noisy))
    assert found.notes[0] == "in_doubt" and found.p_value > 0.05
    chances = found.to_frame()["chance_best"]
    assert chances.sum() == pytest.approx(1) and chances.min() > 0


def test_rivals_are_shown_but_not_chosen():
    found = choose(record({"plain": PLAIN, "tenure": BETTER, "last_mix": [1.0] * 8}))
    assert found.model == "tenure" and "behind:last_mix" in found.notes
    frame = found.to_frame().set_index("model")
    assert not frame.loc["last_mix", "candidate"] and np.isnan(frame.loc["last_mix", "chance_best"])


def test_one_model_has_no_runner_up():
    found = choose(record({"plain": PLAIN}, models=("plain",)))
    assert (found.model, found.runner_up, np.isnan(found.gain)) == ("plain", "", True)
    assert found.headline() == "choice by backtest: plain (8 origins)"


def test_origins_where_a_model_is_missing_do_not_count():
    holes = [np.nan, *BETTER[1:]]
    losses = origin_losses(record({"plain": PLAIN, "tenure": holes}), ["all_live"], "plain")
    assert losses.index.tolist() == [f"{o:02d}" for o in range(1, 8)]
    assert losses["plain"].mean() == pytest.approx(1)


def test_quantities_without_scores_are_left_out():
    scores = record({"plain": PLAIN, "tenure": BETTER}, quantities=("all_live", OF_ORIGIN))
    gone = scores.frame.assign(
        interval_score=scores.frame["interval_score"].where(scores.frame["quantity"] == "all_live")
    )
    other = Backtest(**{**vars(scores), "frame": gone})
    assert choose(other).gain == pytest.approx(choose(scores).gain)


def test_the_reference_is_the_first_model_when_plain_is_not_there():
    found = choose(record({"recent": PLAIN, "tenure": BETTER}, models=("recent", "tenure")))
    assert found.reference == "recent"


def test_refuses_unknown_quantities():
    with pytest.raises(CallError, match='does not score "nobody"'):
        choose(record({"plain": PLAIN}, models=("plain",)), quantities=["nobody"])


def test_no_common_origin():
    with pytest.raises(NotIdentified, match="no past origin from which every model"):
        choose(record({"plain": PLAIN, "tenure": [np.nan] * 8}))
    with pytest.raises(NotIdentified, match="no past origin"):
        choose(record({"plain": PLAIN}, models=("plain", "tenure")))


def test_the_same_seed_gives_the_same_chances():
    rng = np.random.default_rng(4)
    noisy = record({"plain": rng.lognormal(2, 0.3, 10), "tenure": rng.lognormal(2, 0.3, 10)}, horizon=3)
    assert choose(noisy, rng=2).to_frame().equals(choose(noisy, rng=2).to_frame())
