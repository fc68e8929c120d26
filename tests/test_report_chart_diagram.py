"""The states and the moves between them."""

from cohortflow import States
from cohortflow.report.chart.diagram import LABELS_AT_MOST, state_diagram
from tests import report_fixtures as made
from tests.test_report_chart_moves import TWO, rows


def figures(figure):
    return [t.get_text() for t in figure.axes[0].texts]


def test_every_seen_move_has_an_arrow_and_a_rate():
    figure = state_diagram(TWO)
    arrows = [p for p in figure.axes[0].patches if p.__class__.__name__ == "FancyArrowPatch"]
    assert len(arrows) == 2 and {"40.0%", "5.0%"} <= set(figures(figure))


def test_rare_moves_are_faint_and_very_rare_ones_carry_no_figure():
    frame = rows(("a", "a", 9700, 10000, 0.975, 0.97, 0.98), ("a", "b", 150, 10000, 0.015, 0.01, 0.02),
                 ("a", "gone", 50, 10000, 0.005, 0.004, 0.006), ("b", "gone", 1000, 10000, 0.1, 0.09, 0.11),
                 ("b", "b", 9000, 10000, 0.9, 0.89, 0.91))  # fmt: skip
    figure = state_diagram(frame)
    arrows = [p for p in figure.axes[0].patches if p.__class__.__name__ == "FancyArrowPatch"]
    assert sorted(p.get_linewidth() for p in arrows)[:2] == [0.6, 0.6] and "0.5%" not in figures(figure)


def test_many_moves_raise_the_floor_for_figures():
    figure = state_diagram(made.transitions(made.FIFTEEN), states=made.FIFTEEN)
    rates = [t for t in figures(figure) if t.endswith("%")]
    assert 10 < len(rates) <= LABELS_AT_MOST


def test_the_title_claims_a_lowest_state_only_when_intervals_are_apart():
    title = " ".join(t.get_text() for t in state_diagram(TWO).texts)
    assert "a is the state least stayed in: 60.0% (52.0 to 68.0%) are still there a month later" in title
    close = TWO.copy()
    close.loc[close["from"].eq("b") & close["to"].eq("b"), ["low"]] = 0.65
    assert "a keeps 60.0% (52.0 to 68.0%) of its customers" in " ".join(
        t.get_text() for t in state_diagram(close).texts
    )


def test_a_state_without_data_says_so():
    frame = rows(
        ("a", "a", 5, 10, 0.5, 0.3, 0.7), ("a", "b", 5, 10, 0.5, 0.3, 0.7), ("b", "b", 0, 0, None, 0, 1)
    )
    assert "no data" in figures(state_diagram(frame, states=States(["a", "b"])))


def test_nothing_known_at_all():
    frame = rows(("a", "a", 0, 0, None, 0, 1))
    assert "No departure was counted" in " ".join(
        t.get_text() for t in state_diagram(frame, states=States(["a"])).texts
    )
