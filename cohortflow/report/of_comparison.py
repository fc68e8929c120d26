"""A comparison as files: one self-contained page and its charts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from cohortflow import __version__
from cohortflow.report import comparison as words
from cohortflow.report.chart.actual import actual_chart, has_outcome
from cohortflow.report.chart.bridge import bridge_chart
from cohortflow.report.chart.style import THEME, WIDE
from cohortflow.report.content import Exhibit, Section
from cohortflow.report.page import Drawn, drawn_exhibit, picture, templates
from cohortflow.report.text import clean
from cohortflow.states import ALL_LIVE

HOW = (
    "Data restated: the last forecast made again, as it was, on what is now counted for its periods, less what it "
    "said.",
    "The other parts are Shapley values: the mean, over all orders in which the causes could be changed from the last "
    "forecast to this one, of the change that each makes at its turn. No order is preferred; the parts add up exactly.",
    "Who is there now: customers counted by state at the opening of this forecast, against those that the last one "
    "expected there by then. The table of the live base says what came differently since.",
    "Rates by move: the change of each move, paid for by staying, followed through to the period by integrating along "
    "the straight line between the two tables of rates (Aumann and Shapley 1974).",
)


def comparison_files(comparison: Any) -> Mapping[str, str]:
    """comparison.html and charts/*.svg as text; the same bytes for the same comparison."""
    sections = _sections(comparison)
    exhibits = [e for s in sections for e in s.exhibits if e.draw is not None]
    drawn = {e.key: drawn_exhibit(e, WIDE) for e in exhibits}
    head = '<?xml version="1.0" encoding="utf-8"?>\n'
    charts = {f"charts/{key}.svg": f"{head}{chart.text.rstrip()}\n" for key, chart in drawn.items()}
    return {"comparison.html": _page(comparison, sections, exhibits, drawn), **charts}


def _page(
    comparison: Any, sections: list[Section], exhibits: list[Exhibit], drawn: Mapping[str, Drawn]
) -> str:
    pictures = {e.key: picture(e, drawn[e.key]) for e in exhibits}
    return (
        templates()
        .get_template("comparison.html")
        .render(
            comparison=comparison, content=_Quiet(), sections=sections, pictures=pictures, theme=THEME,
            version=__version__, headline=clean(comparison.headline()),
        )
    )  # fmt: skip


class _Quiet:
    """Stands for a Content without findings."""

    def findings_in(self, section: str) -> tuple[()]:
        return ()


def _sections(comparison: Any) -> list[Section]:
    tables, period, quantities = comparison.tables, comparison.period, words.shown_quantities(comparison)
    sections = [
        Section(
            "bridge",
            "Why the forecast changed",
            exhibits=(
                Exhibit(
                    "bridge_all_live",
                    lambda width: bridge_chart(tables["bridge"], period=period, width=width),
                    words.bridge_table(tables["bridge"], period=period, quantities=quantities),
                    open=True,
                ),
                Exhibit(
                    "bridge_moves", table=words.moves_bridge_table(tables["bridge_details"], period=period)
                ),
            ),
            cautions=tuple(words.note_words(note) for note in comparison.notes),
        )
    ]
    if len(tables["outcome"]):
        sections.append(_outcome(tables, quantities))
    if len(tables["budget"]):
        exhibit = Exhibit("budget", table=words.budget_table(tables["budget"]), open=True)
        sections.append(Section("budget", "Against the budget", exhibits=(exhibit,)))
    if len(tables["settings"]):
        exhibit = Exhibit("settings", table=words.settings_table(tables["settings"]), open=True)
        sections.append(Section("settings", "What was set differently", exhibits=(exhibit,)))
    return [*sections, Section("how", "How the change is split", points=HOW)]


def _outcome(tables: Mapping[str, Any], quantities: list[str]) -> Section:
    customers = [q for q in quantities if q != "contribution"]
    exhibits = []
    if has_outcome(tables["outcome"]):
        exhibits.append(
            Exhibit(
                "actual",
                lambda width: actual_chart(tables["outcome"], quantity=ALL_LIVE, width=width),
                words.outcome_table(tables["outcome"], quantities=customers),
            )
        )
    if len(tables["outcome_lines"]):
        exhibits.append(Exhibit("lines", table=words.lines_table(tables["outcome_lines"]), open=True))
    exhibits.append(Exhibit("calibration", table=words.calibration_table(tables["calibration"]), open=True))
    return Section("outcome", "How the last forecasts did", exhibits=tuple(exhibits))
