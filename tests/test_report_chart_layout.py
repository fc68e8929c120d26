"""Every chart, with 2 to 15 states and hostile names, wide and narrow: nothing clipped, nothing on top of another."""

import warnings

import pytest

from cohortflow import report
from cohortflow.report.chart.style import NARROW, WIDE, svg
from tests import report_fixtures as made
from tests.backtest_cases import past_record
from tests.report_layout import clipped, overlapping

SETS = {"small": made.SMALL, "hostile": made.HOSTILE, "fifteen": made.FIFTEEN}


def _groups(states, width):
    import cohortflow as cf

    names = list(states.names)[:5]
    P = [
        [0.5, 0.3, 0.1, 0.05, 0.05],
        [0, 1, 0, 0, 0],
        [0, 0, 0.8, 0.2, 0],
        [0, 0, 0.5, 0.5, 0],
        [0, 0, 0, 0, 1],
    ]
    names += [f"more {i}" for i in range(5 - len(names))]
    chain = cf.Chain(cf.States(names, exits=names[4:]), P)
    return report.groups_chart(cf.long_run(chain, start={names[0]: 10, names[1]: 5}), width=width)


CHARTS = {
    "moves": lambda s, w: report.moves_chart(made.transitions(s), states=s, width=w),
    "diagram": lambda s, w: report.state_diagram(made.transitions(s), states=s, width=w),
    "base": lambda s, w: report.base_chart(made.projection(s), made.rollforward(s), states=s, width=w),
    "rollforward": lambda s, w: report.rollforward_chart(made.rollforward(s), width=w),
    "retention": lambda s, w: report.retention_chart(made.retention(), width=w),
    "exit_time": lambda s, w: report.exit_time_chart(made.exits(s), width=w),
    "exit_reason": lambda s, w: report.exit_reason_chart(made.exits(s), width=w),
    "settling": lambda s, w: report.settling_chart(made.approach(s), made.long_run(s), width=w),
    "groups": _groups,
    "band_parts": lambda s, w: report.band_parts_chart(made.band_parts(s), quantity=s.remaining[0], width=w),
    "scenarios": lambda s, w: report.scenarios_chart(made.scenarios(s), currency="GBP", width=w),
    "backtest": lambda s, w: report.backtest_chart(past_record(), "recent", width=w),
}


@pytest.mark.parametrize("width", [WIDE, NARROW], ids=["wide", "narrow"])
@pytest.mark.parametrize("states", SETS.values(), ids=SETS)
@pytest.mark.parametrize("chart", CHARTS.values(), ids=CHARTS)
def test_no_text_is_clipped_or_covered(chart, states, width):
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Matplotlib currently does not support Arabic natively")
        figure = chart(states, width)
        assert clipped(figure) == []
        assert overlapping(figure) == []


@pytest.mark.parametrize("chart", CHARTS.values(), ids=CHARTS)
def test_every_chart_has_a_text_alternative_that_says_more_than_the_title(chart):
    figure = chart(made.VEG_BOX, WIDE)
    title = figure.texts[0].get_text()
    assert len(figure.alt) > len(title) + 20 and title.split("\n")[0][:20] in figure.alt


@pytest.mark.parametrize("chart", CHARTS.values(), ids=CHARTS)
def test_the_same_data_give_the_same_bytes(chart):
    assert svg(chart(made.SMALL, NARROW)) == svg(chart(made.SMALL, NARROW))


def test_the_check_itself_sees_clipping_and_covering():
    from cohortflow.report.chart.style import drawing, house_style, write

    with house_style():
        figure = drawing("t", "s", width=3.0, body=1.0, alt="")
        write(figure, 2.8, 0.8, "beyond the edge")
        write(figure, 0.5, 0.6, "one on")
        write(figure, 0.55, 0.62, "the other")
    assert clipped(figure) == ["beyond the edge"]
    assert ("one on", "the other") in overlapping(figure)
