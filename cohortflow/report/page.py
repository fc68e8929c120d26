"""A Content as one self-contained HTML page: no network, no script needed, charts drawn inside it.

User text reaches the page only through autoescaping templates and matplotlib's own escaping of SVG text.
"""

from __future__ import annotations

import html
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from cohortflow.errors import CallError, listed, nearest
from cohortflow.report.chart.style import NARROW, THEME, WIDE, svg
from cohortflow.report.content import Content, Exhibit
from cohortflow.report.rounding import percent
from cohortflow.report.sections import sections_of
from cohortflow.report.table import split
from cohortflow.report.text import clean

TITLES = {
    "moves": "Rates of moves", "diagram": "States and moves", "base": "The base over time",
    "rollforward": "From opening to closing", "settling": "Approach to the settled mix",
    "groups": "Groups that nobody leaves", "retention": "Retention", "exit_time": "Time until leaving",
    "exit_reason": "Ways of leaving", "bridge_all_live": "From the last forecast to this one",
    "actual": "Forecast and counts", "levers_0": "What one point of each move is worth",
    "band_parts": "What the uncertainty is made of", "backtest": "Past forecasts",
    "scenarios": "What the scenarios would change",
}  # fmt: skip
_COLOURS = {light: f"var(--{name})" for name, (light, _) in THEME.items()}


@dataclass(frozen=True)
class Drawn:
    """A chart as SVG text with its text alternative and width in CSS pixels."""

    text: str
    alt: str
    pixels: int


@dataclass(frozen=True)
class Picture:
    """A chart ready for the page: its SVG for wide screens and, if it is redrawn for them, for narrow ones.

    A chart that is not redrawn scrolls sideways instead of shrinking beyond reading.
    """

    title: str
    wide: Markup
    narrow: Markup | None


def page_html(content: Content, drawn: Mapping[str, Drawn] | None = None) -> str:
    """The whole page as text; the same bytes for the same content.

    drawn : the wide charts by key, when they have been drawn already (`wide_charts`)
    """
    drawn = wide_charts(content) if drawn is None else drawn
    pictures = {e.key: picture(e, drawn[e.key]) for e in content.exhibits() if e.draw is not None}
    return templates().get_template("page.html").render(
        content=content, facts=content.facts, sections=sections_of(content), pictures=pictures, theme=THEME,
        titles={s.key: s.title for s in content.sections},
    )  # fmt: skip


def fragment_html(content: Content, section: str) -> str:
    """One section as a fragment with its own style, for notebooks. CallError when there is no such section."""
    known = [s.key for s in sections_of(content)]
    if section not in known:
        raise CallError(
            f'There is no section "{section}"{nearest(section, known)}; there are {listed(known)}.'
        )
    chosen = [s for s in content.sections if s.key == section]
    pictures = {e.key: picture(e, drawn_exhibit(e, WIDE)) for s in chosen for e in s.exhibits if e.draw is not None}
    return (
        templates()
        .get_template("fragment.html")
        .render(content=content, facts=content.facts, sections=chosen, pictures=pictures, theme=THEME)
    )


def wide_charts(content: Content) -> dict[str, Drawn]:
    """Every chart of the report at its full width, by key."""
    return {e.key: drawn_exhibit(e, WIDE) for e in content.exhibits() if e.draw is not None}


def drawn_exhibit(exhibit: Exhibit, width: float) -> Drawn:
    assert exhibit.draw is not None
    figure = exhibit.draw(width)
    return Drawn(svg(figure), figure.alt, round(96 * float(figure.get_size_inches()[0])))


def picture(exhibit: Exhibit, wide: Drawn) -> Picture:
    """An exhibit's chart for the page."""
    title = TITLES.get(exhibit.key, exhibit.key)
    if exhibit.narrow:
        return Picture(title, inline(wide, exhibit.key), inline(drawn_exhibit(exhibit, NARROW), f"{exhibit.key}-n"))
    return Picture(title, inline(wide, exhibit.key, least=max(640, round(0.8 * wide.pixels))), None)


def inline(drawn: Drawn, key: str, *, least: int = 0) -> Markup:
    """The chart as an <svg> element for the page: own ids, the page's colours, its text alternative.

    least : pixels below which it does not shrink (0: it shrinks with the page)
    """
    text = drawn.text
    view = re.search(r'viewBox="[^"]+"', text)
    assert view is not None
    text = text[text.index(">", text.index("<svg")) + 1 :]
    text = re.sub(r'\bid="([^"]+)"', rf'id="{key}-\1"', text)
    text = re.sub(r"url\(#([^)]+)\)", rf"url(#{key}-\1)", text)
    text = re.sub(r'href="#([^"]+)"', rf'href="#{key}-\1"', text)
    text = re.sub(r"<!--.*?-->\s*", "", text, flags=re.S)
    for colour, name in _COLOURS.items():
        text = text.replace(colour, name)
    style = f' style="min-width:{least}px"' if least else ""
    label = html.escape(clean(drawn.alt))
    spaces = 'xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink"'
    return Markup(f'<svg {spaces} {view.group(0)} role="img" aria-label="{label}"{style}>{text}')


@cache
def templates() -> Environment:
    env = Environment(
        loader=PackageLoader("cohortflow.report", "template"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    env.filters.update(clean=clean, percent=percent, split=split)
    return env
