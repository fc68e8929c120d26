"""The one look: colours, type, SVG text."""

import re
import xml.etree.ElementTree as ET
from pathlib import Path

import matplotlib as mpl
import pytest

from cohortflow.report.chart.style import (
    RC,
    SHADES,
    THEME,
    Drawing,
    drawing,
    fit_lines,
    house_style,
    panel,
    shade,
    share_ticks,
    svg,
    text_width,
)  # fmt: skip


def luminance(colour: str) -> float:
    """WCAG 2.1 relative luminance of #rrggbb."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a: str, b: str) -> float:
    low, high = sorted((luminance(a), luminance(b)))
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("mode", [0, 1], ids=["light", "dark"])
@pytest.mark.parametrize("name", ["ink", "soft", "future", "model"])
def test_texts_stand_out_from_the_paper(name, mode):
    assert contrast(THEME[name][mode], THEME["paper"][mode]) >= 4.5  # WCAG 2.1, 1.4.3


@pytest.mark.parametrize("mode", [0, 1], ids=["light", "dark"])
def test_figures_are_readable_on_every_shade_of_the_heat_map(mode):
    from cohortflow.report.chart.moves import DARK_FROM

    for step in range(len(SHADES)):
        text = THEME["paper" if step >= DARK_FROM else "ink"][mode]
        assert contrast(text, THEME[f"shade-{step}"][mode]) >= 4.5, step


def test_shades_run_from_light_to_dark_so_that_they_read_in_grey():
    steps = [luminance(c) for c in SHADES]
    assert all(a > b * 1.1 for a, b in zip(steps, steps[1:], strict=False))


def test_past_projection_and_model_differ_in_grey_or_dash():
    from cohortflow.report.chart import base, retention, settling

    for module in (base, retention, settling):
        assert "linestyle=(0, (4, 1.6))" in Path(module.__file__).read_text(encoding="utf-8")


def small(title="A title", name="x"):
    with house_style():
        figure = drawing(title, "what it shows", width=4.0, body=1.0, alt="a line")
        axes = panel(figure, 0.5, 0.1, 3.0, 0.6)
        axes.plot([0, 1], [0, 1])
        axes.text(0.5, 0.5, name)
    return figure


def test_svg_is_the_same_each_time_and_holds_no_date():
    assert svg(small()) == svg(small())
    assert "<dc:date>" not in svg(small()) and "metadata" not in svg(small())


def test_svg_keeps_text_as_text_and_escapes_it():
    drawn = svg(small(name="<script>alert('x')</script> & $\\frac{1}{0}$"))
    ET.fromstring(drawn)
    assert "<script>" not in drawn and "&lt;script&gt;" in drawn and "$\\frac{1}{0}$" in drawn


def test_global_settings_stay_as_they_were():
    before = dict(mpl.rcParams)
    svg(small())
    assert dict(mpl.rcParams) == before
    assert RC["svg.hashsalt"] != before["svg.hashsalt"]


def test_a_drawing_shows_itself_in_a_notebook():
    figure = small()
    assert isinstance(figure, Drawing) and figure._repr_svg_().startswith("<svg")


def test_saving_pixels_leaves_the_svg_unchanged(tmp_path):
    figure = small(name="毎週")
    before = svg(figure)
    figure.savefig(tmp_path / "x.png")
    assert (tmp_path / "x.png").stat().st_size > 1000 and svg(figure) == before


def test_long_titles_wrap_inside_the_figure():
    lines = fit_lines("word " * 60, 3.0, 11, bold=True)
    assert len(lines) > 3 and all(text_width(line, 11, bold=True) <= 3.0 for line in lines)
    assert len(re.findall("word", svg(small(title="word " * 30)))) == 30


def test_shade_counts_the_steps_reached():
    assert [shade(x, (0.1, 0.5)) for x in (0.0, 0.1, 0.49, 0.5, 1.0)] == [0, 1, 1, 2, 2]


def test_ticks_say_the_share_they_stand_at():
    with house_style():
        figure = drawing("t", "s", width=4.0, body=1.0, alt="")
        axes = panel(figure, 0.5, 0.1, 3.0, 0.6)
        axes.set_ylim(0, 0.035)
        share_ticks(axes)
        ticks = axes.get_yticks()
        said = [axes.yaxis.get_major_formatter()(v, 0) for v in ticks]
    assert [float(s.rstrip("%")) / 100 for s in said] == pytest.approx(list(ticks), abs=1e-12)
